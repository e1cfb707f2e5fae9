"""A small session with every kind of input file, and pieces of hostile ones."""

from __future__ import annotations

import random
from pathlib import Path

from sessions import small_session
from tieline.configuration import Session, load

ANALYTES = ("SiO2", "TiO2", "Al2O3", "FeO", "MnO", "MgO", "CaO", "Na2O", "NiO")
COMPOSITIONS = {
    "olivine": (40.3, 0.02, 0.05, 10.2, 0.16, 48.6, 0.22, 0.01, 0.35),
    "glass": (50.4, 1.25, 15.1, 9.1, 0.17, 8.0, 11.2, 2.6, 0.021),
}
ACCEPTED = {"SiO2": 50.0, "MgO": 8.0, "NiO": 0.02}
HEADER = ("Point", "Run", "Phase", *(name for a in ANALYTES for name in (a, f"{a} 1s")))
BODY = """
[[ingest.tables]]
path = "probe.csv"
technique = "EPMA"
batch = "p1"
unit = "wt%"
columns = { spot = "Point", experiment = "Run", phase = "Phase" }
sigma = { pattern = "{analyte} 1s" }
[ingest.experiments]
path = "experiments.csv"
columns = { experiment = "Run", temperature_C = "T", pressure_GPa = "P" }
[ingest.reference_materials]
path = "accepted.csv"
[screen]
rulings = "rulings.csv"
"""


def rows(experiments: int = 2, spots: int = 5, seed: int = 1) -> list[list[object]]:
    """Spots of olivine, glass and a reference glass, with 1 % scatter."""
    draw = random.Random(seed)
    found: list[list[object]] = []
    for experiment in (*(f"X-{number}" for number in range(1, experiments + 1)), "GLS-1"):
        phases = ("olivine", "glass") if experiment != "GLS-1" else ("glass",)
        for phase in phases:
            for number in range(1, spots + 1):
                cells = [(value * draw.gauss(1, 0.01), 0.01 * value) for value in COMPOSITIONS[phase]]
                label = "GLS-1" if experiment == "GLS-1" else phase
                numbers = [f"{number:.5g}" for pair in cells for number in pair]
                found.append([f"{experiment}-{phase[:2]}-{number}", experiment, label, *numbers])
    return found


def write_session(folder: Path, body: str = BODY, out: str = "runs") -> Session:
    """Writes all files of the session and loads it."""
    session = small_session(
        folder,
        {
            "probe.csv": (HEADER, rows()),
            "experiments.csv": (("Run", "T", "P"), [("X-1", 1250, 0.5), ("X-2", 1300, 1.0)]),
            "accepted.csv": (
                ("material", "analyte", "value", "unit", "sd", "source"),
                [("GLS-1", name, value, "wt%", 0.02 * value, "invented") for name, value in ACCEPTED.items()],
            ),
            "rulings.csv": (
                ("spot", "analyte", "verdict", "analyst", "date", "reason"),
                [("X-1-ol-1", "*", "drop", "A. Analyst", "2024-05-01", "on a crack")],
            ),
        },
        body,
    )
    return load(session.path)


# Every stage has a setting among these, so that all of them come out different.
CHANGES = (
    ('batch = "p1"', 'batch = "p2"'),
    ("[screen]", "[partition]\nconfidence = 0.9\n[screen]"),
)


def change_settings(session: Session) -> Session:
    """The session with other settings, which make every stage stale."""
    text = session.path.read_text(encoding="utf-8")
    for old, new in CHANGES:
        assert old in text
        text = text.replace(old, new)
    session.path.write_text(text, encoding="utf-8")
    return load(session.path)
