# `make demo` and `make test` are all a newcomer needs; both set up .venv first and only once.

PYTHON ?= python3
VENV ?= .venv
BIN := $(VENV)/bin
CORE := $(VENV)/.core-installed
DEV := $(VENV)/.dev-installed
PIP := $(BIN)/python -m pip --disable-pip-version-check --quiet

.PHONY: demo test check format bench lock wheel-demo clean

demo: $(CORE)  ## set up and reduce the demo session
	@$(BIN)/tieline run configs/ember.toml

test: $(DEV)  ## set up and run all tests
	@$(BIN)/python -m pytest -q

check: $(DEV)  ## format, lint, types
	@$(BIN)/ruff format --check .
	@$(BIN)/ruff check .
	@$(BIN)/mypy

format: $(DEV)
	@$(BIN)/ruff format .
	@$(BIN)/ruff check --fix .

bench: $(DEV)  ## what is measured and never timed in a test
	@$(BIN)/python tests/benchmarks/ingest.py

wheel-demo: $(DEV)  ## build a wheel, install it in an empty environment, run the demo from it
	@$(BIN)/python tests/wheel_demo.py

lock: $(DEV)  ## renew the pinned requirement files
	@$(BIN)/uv pip compile -q --universal --python-version 3.11 --generate-hashes --no-emit-index-url --no-header \
	  pyproject.toml --extra build -o requirements/core.txt
	@$(BIN)/uv pip compile -q --universal --python-version 3.11 --generate-hashes --no-emit-index-url --no-header \
	  pyproject.toml --extra build --extra dev -c requirements/core.txt -o requirements/dev.txt

$(VENV)/bin/python:
	@$(PYTHON) -c 'import sys; sys.exit(0 if sys.version_info >= (3, 11) else "tieline needs Python 3.11 or newer; set PYTHON=...")'
	@$(PYTHON) -m venv $(VENV)

$(CORE): requirements/core.txt pyproject.toml | $(VENV)/bin/python
	@echo "setting up $(VENV), once"
	@$(PIP) install --require-hashes -r requirements/core.txt
	@$(PIP) install --no-deps --no-build-isolation -e .
	@touch $@

$(DEV): requirements/dev.txt $(CORE)
	@echo "adding what the tests need to $(VENV), once"
	@$(PIP) install --require-hashes -r requirements/dev.txt
	@touch $@

clean:
	rm -rf $(VENV) dist build
