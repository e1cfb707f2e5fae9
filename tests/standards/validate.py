"""Validates a run folder with the standards' own validators; runs in an environment of its own (`make standards`).

    .venv-standards/bin/python tests/standards/validate.py RUN_FOLDER

The validators need no network: the RO-Crate context, which the RO-Crate validator would fetch, is taken from the
`rocrate` package. That is the context of version 1.3, which holds all terms of 1.1. Prints one JSON object.
"""

from __future__ import annotations

import json
import sys
from importlib.resources import files
from pathlib import Path
from typing import Any

CONTEXT = "https://w3id.org/ro/crate/1.1/context"


def use_packaged_context() -> None:
    """Answers requests for the RO-Crate context from the package; any other address stays unreachable."""
    import requests
    from rdflib.plugins.shared.jsonld import context as jsonld_context
    from rdflib.plugins.shared.jsonld import util as jsonld_util
    from rocrate_validator.utils import document_loader
    from rocrate_validator.utils.http import HttpRequester

    text = files("rocrate").joinpath("data/ro-crate.jsonld").read_text(encoding="utf-8")
    original = jsonld_util.source_to_json

    def load(source: Any, *arguments: Any, **options: Any) -> Any:
        return (json.loads(text), None) if source == CONTEXT else original(source, *arguments, **options)

    def get(_: Any, address: str, **__: Any) -> requests.Response:
        if address != CONTEXT:
            raise requests.ConnectionError(f"not looked up: {address}")
        response = requests.Response()
        response.status_code, response.url, response._content = 200, address, text.encode()
        response.headers["Content-Type"] = "application/ld+json"
        return response

    document_loader.install_document_loader = lambda: True
    jsonld_util.source_to_json = jsonld_context.source_to_json = load
    HttpRequester.get = HttpRequester.head = get


def crate_problems(folder: Path, severity: str) -> dict[str, Any]:
    use_packaged_context()
    from rocrate_validator import models, services

    settings = services.ValidationSettings(
        rocrate_uri=str(folder),
        profile_identifier="ro-crate-1.1",
        requirement_severity=models.Severity[severity],
        skip_availability_check=True,
    )
    result = services.validate(settings)
    issues = [
        f"{issue.severity.name} {issue.check.identifier}: {issue.message}" for issue in result.get_issues()
    ]
    return {"checks": len(result.executed_checks), "issues": issues}


def table_problems(folder: Path) -> dict[str, Any]:
    """Every CSV file against its table schema, its size and its digest; and every unit against UCUM."""
    from frictionless import Package
    from ucumvert import get_ucum_parser

    descriptor = json.loads((folder / "datapackage.json").read_text(encoding="utf-8"))
    metadata = [str(error) for error in Package.metadata_validate(descriptor)]
    report = Package(str(folder / "datapackage.json")).validate()
    issues = [f"{error.type}: {error.message}" for task in report.tasks for error in task.errors]
    rows = {task.place: task.stats["rows"] for task in report.tasks}
    units = {
        field["unit"]
        for one in descriptor["resources"]
        for field in one["schema"]["fields"]
        if "unit" in field
    }
    parser = get_ucum_parser()
    for unit in sorted(units):
        parser.parse(unit)
    return {"issues": [*metadata, *issues], "rows": rows, "units": sorted(units)}


if __name__ == "__main__":
    place = Path(sys.argv[1])
    print(json.dumps({"crate": crate_problems(place, "RECOMMENDED"), "tables": table_problems(place)}))
