# `make demo` and `make test` are all a newcomer needs; both set up .venv first and only once.

PYTHON ?= python3
VENV ?= .venv
BIN := $(VENV)/bin
CORE := $(VENV)/.core-installed
DEV := $(VENV)/.dev-installed
# The validators of the open standards need other versions of libraries than the program has: a place of their own.
STANDARDS := .venv-standards
PIP := $(BIN)/python -m pip --disable-pip-version-check --quiet

.PHONY: demo test check format bench faults fuzz lowest audit lock wheel-demo docs pages standards clean

demo: $(CORE)  ## set up and reduce the demo session
	@$(BIN)/tieline run configs/ember.toml --report

test: $(DEV) $(STANDARDS)/.installed  ## set up and run all tests
	@$(BIN)/python -m pytest -q -n 2

check: $(DEV)  ## format, lint, types
	@$(BIN)/ruff format --check .
	@$(BIN)/ruff check .
	@$(BIN)/mypy

format: $(DEV)
	@$(BIN)/ruff format .
	@$(BIN)/ruff check --fix .

bench: $(DEV)  ## what is measured and never timed in a test
	@$(BIN)/python tests/benchmarks/chain.py
	@$(BIN)/python tests/benchmarks/ingest.py
	@$(BIN)/python tests/benchmarks/partition.py
	@$(BIN)/python tests/benchmarks/commands.py
	@$(BIN)/python tests/benchmarks/archive.py

MINUTES ?= 10

faults: $(DEV)  ## strike a run at every file operation, and tables of a gigabyte; about half an hour
	@$(BIN)/python tests/faults/strikes.py kill fail full
	@$(BIN)/python tests/faults/strikes.py timed --points 60
	@TIELINE_HUGE=1 $(BIN)/python -m pytest -q tests/faults/test_hostile_tables.py tests/faults/test_platforms.py

fuzz: $(DEV)  ## search for input that breaks a promise: make fuzz MINUTES=10
	@$(BIN)/python tests/faults/fuzz.py --minutes $(MINUTES)

lowest: $(DEV)  ## run the tests with the lowest versions of the dependencies that are allowed
	@$(BIN)/python tests/lowest.py

audit: $(DEV)  ## ask for known weaknesses of the pinned dependencies; needs a network
	@$(BIN)/uv tool run pip-audit --require-hashes --disable-pip -r requirements/core.txt

docs: $(DEV)  ## build the documentation in site/; a warning is an error
	@$(BIN)/python -m sphinx -q -W --keep-going -b html -d build/doctrees docs site
	@echo "site/index.html"

pages: $(DEV)  ## renew the reference pages and the outputs shown in the documentation
	@$(BIN)/python docs/generate_reference.py
	@$(BIN)/python tests/docs/transcripts.py --write
	@$(BIN)/python tests/docs/notebook.py --write

standards: $(STANDARDS)/.installed  ## validate the demo's run folder with the standards' own validators
	@$(BIN)/python -m pytest -q tests/test_crate.py

$(STANDARDS)/.installed: requirements/standards.txt | $(VENV)/bin/python
	@$(BIN)/python -m venv $(STANDARDS)
	@$(STANDARDS)/bin/python -m pip --disable-pip-version-check --quiet install --require-hashes -r requirements/standards.txt
	@touch $@

wheel-demo: $(DEV)  ## build a wheel, install it in an empty environment, run the demo from it
	@$(BIN)/python tests/wheel_demo.py

lock: $(DEV)  ## renew the pinned requirement files
	@$(BIN)/uv pip compile -q --universal --python-version 3.11 --generate-hashes --no-emit-index-url --no-header \
	  pyproject.toml --extra build -o requirements/core.txt
	@$(BIN)/uv pip compile -q --universal --python-version 3.11 --generate-hashes --no-emit-index-url --no-header \
	  pyproject.toml --extra build --extra dev --extra docs --extra query --extra archive -c requirements/core.txt -o requirements/dev.txt
	@$(BIN)/uv pip compile -q --universal --python-version 3.11 --generate-hashes --no-emit-index-url --no-header \
	  requirements/standards.in -o requirements/standards.txt

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
	rm -rf $(VENV) $(STANDARDS) dist build site
