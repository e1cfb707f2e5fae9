"""The run folder as an RO-Crate 1.1: what lies there, made from what, by which program, by whom, on which terms.

`ro-crate-metadata.json` names every file with its digest, every stage as an action with what it used and made (W3C
PROV terms beside those of schema.org), the inputs by digest, the program, the people and the licence of `[about]`.
`datapackage.json` beside it describes the columns of the CSV files. No time is recorded: same results, same bytes.
"""

from __future__ import annotations

import csv
import hashlib
import json
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any
from urllib.parse import quote

from tieline import __version__
from tieline.configuration import Session
from tieline.lock import SEAL_NAME, locked
from tieline.manifest import read_manifest
from tieline.settings.about import AboutSettings
from tieline.stages import STAGES
from tieline.storage import write_text
from tieline.table_schema import CSV_FILES, DATA_PACKAGE, data_package

METADATA = "ro-crate-metadata.json"
# The standard demands a date of publication. Where none is configured this stands for: not published yet.
NOT_PUBLISHED = "1970-01-01"
CONTEXT = [
    "https://w3id.org/ro/crate/1.1/context",
    {"prov": "http://www.w3.org/ns/prov#", "sha256": "http://schema.org/sha256"},
]
FORMATS = {
    ".bib": "application/x-bibtex",
    ".csv": "text/csv",
    ".html": "text/html",
    ".json": "application/json",
    ".parquet": "application/vnd.apache.parquet",
    ".pdf": "application/pdf",
    ".svg": "image/svg+xml",
    ".tex": "application/x-tex",
    ".toml": "application/toml",
    ".txt": "text/plain",
    ".xlsx": "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet",
}
DESCRIPTIONS = {
    "run.json": "Manifest: digests of inputs and stage files, and an account of every value",
    "effective.toml": "The complete settings in effect, as a configuration that can be run again",
    "report.html": "The report: results, what needs attention, spots and pictures",
    "methods.txt": "Methods paragraph",
    "methods.tex": "Methods paragraph for LaTeX",
    "references.bib": "The works that the methods paragraph cites",
    "partition_coefficients.csv": "Partition coefficients with intervals, budget and class",
    "partition_coefficients.xlsx": "The same with phase means, spots, reference materials and settings",
    "partition_coefficients.tex": "The table of partition coefficients for LaTeX",
    "left_out.csv": "Every value that was left out, by which test or person, and why",
    DATA_PACKAGE: "Columns of the CSV files with types, meanings and UCUM units (Frictionless table schema)",
}

Entity = dict[str, Any]


def write_crate(session: Session) -> tuple[str, ...]:
    """Writes both descriptions into the run folder, after everything else there; returns their names."""
    folder = session.run_folder
    with locked(folder):
        package = {name: _csv_facts(folder / name) for name in CSV_FILES if (folder / name).exists()}
        if package:
            write_text(folder / DATA_PACKAGE, _text(data_package(session.settings.session, package)))
        write_text(folder / METADATA, _text(crate(session, _files(folder))))
    return (DATA_PACKAGE, METADATA)


def crate(session: Session, files: Mapping[str, Entity]) -> Entity:
    """The metadata document for the files of a run folder: path -> size and digest."""
    manifest = read_manifest(session.run_folder)
    about = session.settings.about
    makers = _makers(files, manifest)
    people = [_person(number, person) for number, person in enumerate(about.people, start=1)]
    licence = _licence(about)
    actions = [*_stage_actions(session, manifest), *_report_action(files, makers)]
    root: Entity = {
        "@id": "./",
        "@type": "Dataset",
        "name": session.settings.report.title or session.settings.session,
        "description": _description(session),
        "datePublished": about.date or NOT_PUBLISHED,
        "license": _ref(licence["@id"]),
        "hasPart": [_ref(_path_id(path)) for path in files],
        "mentions": _one_or_many([_ref(action["@id"]) for action in actions]),
    }
    if people:
        root["author"] = _one_or_many([_ref(person["@id"]) for person in people])
    if about.publisher:
        root["publisher"] = _ref(_organisation_id(about.publisher))
    descriptor = {
        "@id": METADATA,
        "@type": "CreativeWork",
        "conformsTo": _ref("https://w3id.org/ro/crate/1.1"),
        "about": _ref("./"),
    }
    graph = [
        descriptor,
        root,
        *(_file(path, facts, makers.get(path)) for path, facts in files.items()),
        *(_input(path, digest) for path, digest in manifest.get("inputs", {}).items()),
        *actions,
        _software(),
        licence,
        *people,
        *_organisations(about),
    ]
    return {"@context": CONTEXT, "@graph": graph}


def _description(session: Session) -> str:
    about = session.settings.about
    text = about.description or (
        "Partition coefficients of a session of crystallisation experiments, reduced by tieline from tables of spot analyses."
    )
    return text if about.date else f"{text} No date of publication is given; {NOT_PUBLISHED} stands for it."


def _files(folder: Path) -> dict[str, Entity]:
    """Every file of the folder but the metadata document itself and the seal, which is written after it."""
    recorded = {
        name: entry["sha256"]
        for stage in read_manifest(folder).get("stages", {}).values()
        for name, entry in stage["files"].items()
    }
    paths = (path for path in folder.rglob("*") if path.is_file())
    names = sorted(path.relative_to(folder).as_posix() for path in paths)
    return {
        name: {"size": (folder / name).stat().st_size, "sha256": recorded.get(name) or _digest(folder / name)}
        for name in names
        if name not in (METADATA, SEAL_NAME) and not any(part.startswith(".") for part in name.split("/"))
    }


def _makers(files: Iterable[str], manifest: Mapping[str, Any]) -> dict[str, str]:
    """Which action made a file."""
    makers = {
        name: "#report"
        for name in files
        if name in DESCRIPTIONS and name not in ("run.json", "effective.toml")
    }
    for stage, entry in manifest.get("stages", {}).items():
        makers |= {name: f"#stage-{stage}" for name in entry["files"] if name in files}
    return makers


def _stage_actions(session: Session, manifest: Mapping[str, Any]) -> list[Entity]:
    known = manifest.get("inputs", {})
    actions = []
    for stage in STAGES:
        entry = manifest.get("stages", {}).get(stage.name)
        if entry is None:
            continue
        used = [_ref(f"{name}.parquet") for name in stage.inputs]
        used += [_ref(_input_id(path)) for path in stage.files(session.settings) if path in known]
        made = [_ref(name) for name in entry["files"]]
        actions.append(
            _action(f"#stage-{stage.name}", f"Stage {stage.name}", used, made)
            | {
                "identifier": entry["fingerprint"],
                "description": f"revision {entry['revision']} of the stage",
            }
        )
    return actions


def _report_action(files: Mapping[str, Entity], makers: Mapping[str, str]) -> list[Entity]:
    made = [_ref(_path_id(name)) for name in files if makers.get(name) == "#report"]
    used = [_ref(name) for name in files if name.endswith(".parquet")]
    return [_action("#report", "Report", used, made)] if made else []


def _action(identity: str, name: str, used: list[Entity], made: list[Entity]) -> Entity:
    action: Entity = {"@id": identity, "@type": ["CreateAction", "prov:Activity"], "name": name}
    action |= {"instrument": _ref("#tieline"), "prov:wasAssociatedWith": _ref("#tieline")}
    if used:
        action |= {"object": _one_or_many(used), "prov:used": _one_or_many(used)}
    return action | {"result": _one_or_many(made), "prov:generated": _one_or_many(made)}


def _one_or_many(references: list[Entity]) -> Entity | list[Entity]:
    """A list of one is written as that one, as the standard recommends."""
    return references[0] if len(references) == 1 else references


def _file(path: str, facts: Mapping[str, Any], maker: str | None) -> Entity:
    entity: Entity = {"@id": _path_id(path), "@type": ["File", "prov:Entity"], "name": path}
    name = path.rpartition("/")[2]
    description = DESCRIPTIONS.get(name) or _table_description(name)
    if description:
        entity["description"] = description
    entity["encodingFormat"] = FORMATS.get(Path(name).suffix, "application/octet-stream")
    entity |= {"contentSize": str(facts["size"]), "sha256": facts["sha256"]}
    return entity | ({"prov:wasGeneratedBy": _ref(maker)} if maker else {})


def _table_description(name: str) -> str:
    from tieline.columns import TABLES

    spec = TABLES.get(name.removesuffix(".parquet"))
    return f"Stage table {spec.name}, one row per {spec.row}" if spec else ""


def _input(path: str, digest: str) -> Entity:
    """An input file, known by its digest: it lies outside the run folder."""
    return {
        "@id": _input_id(path),
        "@type": ["CreativeWork", "prov:Entity"],
        "name": path,
        "description": "Input file as the configuration names it; it is told by its digest.",
        "sha256": digest,
    }


def _software() -> Entity:
    return {
        "@id": "#tieline",
        "@type": ["SoftwareApplication", "prov:SoftwareAgent"],
        "name": "tieline",
        "softwareVersion": __version__,
        "description": "Partition coefficients with honest intervals, from raw microprobe and laser spot tables",
    }


def _person(number: int, person: Any) -> Entity:
    identity = f"https://orcid.org/{person.orcid}" if person.orcid else f"#person-{number}"
    entity: Entity = {"@id": identity, "@type": ["Person", "prov:Person"], "name": person.name}
    return entity | (
        {"affiliation": _ref(_organisation_id(person.affiliation))} if person.affiliation else {}
    )


def _organisations(about: AboutSettings) -> list[Entity]:
    named = (*(person.affiliation for person in about.people), about.publisher)
    names = dict.fromkeys(name for name in named if name)
    return [{"@id": _organisation_id(name), "@type": "Organization", "name": name} for name in names]


def _organisation_id(name: str) -> str:
    return f"#organisation-{quote(name)}"


def _licence(about: AboutSettings) -> Entity:
    if about.licence is None:
        return {
            "@id": "#no-licence",
            "@type": "CreativeWork",
            "name": "No licence stated",
            "description": "Nobody may reuse this without asking, until a licence is named in about.licence.",
        }
    address = about.licence.startswith("http")
    identity = about.licence if address else f"https://spdx.org/licenses/{about.licence}"
    description = "Terms of use of this folder, as its configuration names them."
    return {"@id": identity, "@type": "CreativeWork", "name": about.licence, "description": description}


def _path_id(path: str) -> str:
    return quote(path)


def _input_id(path: str) -> str:
    return f"#input-{quote(path)}"


def _ref(identity: str) -> Entity:
    return {"@id": identity}


def _csv_facts(path: Path) -> dict[str, Any]:
    with path.open(newline="", encoding="utf-8") as stream:
        header = next(csv.reader(stream), [])
    return {"header": header, "bytes": path.stat().st_size, "sha256": _digest(path)}


def _digest(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _text(document: Mapping[str, Any]) -> str:
    return json.dumps(document, indent=1, ensure_ascii=False) + "\n"
