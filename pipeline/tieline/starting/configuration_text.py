"""The text of a first configuration, with the evidence as comments and what nobody can tell as questions.

A question is a line `# decide: ...` above the key it is about. A configuration with such a line is refused
until the line is deleted, so that no guess becomes a number unnoticed.
"""

from __future__ import annotations

import json
import re
from collections.abc import Sequence

from tieline.reading.input_file import InputFile
from tieline.starting.combined_labels import label_pattern
from tieline.starting.look import MANY_OXIDES, Look, look_at, phases_of

QUESTION = "# decide:"
OTHER_LABELS = (
    "spot",
    "experiment",
    "phase",
    "grain",
    "zone (rim, core)",
    "distance_um",
    "batch",
    "sequence",
)


def first_configuration(files: Sequence[InputFile], session: str) -> str:
    """A commented TOML configuration for the tables. Raises InputError where a file is no table."""
    looks = [look_at(file) for file in files]
    lines = [
        "# Made by `tieline start` from the tables named below. Every line that starts with",
        f"# `{QUESTION}` is a question: answer it in the key below it, then delete the line.",
        "",
        f"session = {_text(session)}",
        "",
    ]
    for look in looks:
        lines += [*_of_table(look, _table(look), several=len(looks) > 1), ""]
    lines += _phases(looks)
    lines += _reference_materials(looks)
    lines += _internal_standards(looks)
    return "\n".join(map(_one_line, lines)).rstrip("\n") + "\n"


def _of_table(look: Look, lines: Sequence[str], several: bool) -> list[str]:
    """With several tables every question names its own: questions are also read where the lines around are not."""
    start = f"{QUESTION} "
    named = f"{start}{look.file}: " if several else start
    return [line.replace(start, named, 1) if line.startswith(start) else line for line in lines]


def _table(look: Look) -> list[str]:
    kinds = "isotopes" if look.isotopes else "oxides and elements"
    seen = f"{_counted(look.n_spots, 'spot')}, {len(look.analytes)} analytes ({kinds}){_not_spots(look)}"
    lines = ["[[ingest.tables]]", f"path = {_text(look.file)}    # {seen}"]
    lines += _technique(look)
    if "batch" not in look.labels:
        lines += [f"{QUESTION} which measuring session? Spots of one batch share their calibration errors."]
        lines += [f"batch = {_text(look.file.rsplit('/', 1)[-1].split('.')[0])}"]
    lines += _unit(look)
    lines += _columns(look)
    lines += _sigma(look)
    if look.limit_pattern:
        lines.append(f"limit = {{ pattern = {_text(look.limit_pattern)} }}")
    if look.doubtful:
        names = ", ".join(look.doubtful)
        lines.append(
            f"{QUESTION} are these elements: {names}? If so give the column a unit; else add to columns.ignore."
        )
    return lines


def _technique(look: Look) -> list[str]:
    """A laser reports isotopes, a probe oxides in wt%; anything else is asked, with the likelier answer."""
    if look.isotopes:
        return ['technique = "laser"    # isotopes are reported']
    units = {analyte.unit or look.unit for analyte in look.analytes.values()}
    n_oxides = sum(analyte.kind == "oxide" for analyte in look.analytes.values())
    if units == {"wt%"} and n_oxides >= MANY_OXIDES:
        return ['technique = "EPMA"']
    guess = "laser" if units and units <= {"ppm", "ppb"} else "EPMA"
    return [f"{QUESTION} which technique measured this table?", f"technique = {_text(guess)}"]


def _not_spots(look: Look) -> str:
    words = " and ".join(f"{number} of {what}" for what, number in look.not_spots.items())
    return f"; rows not counted: {words}" if words else ""


def _counted(number: int, one: str) -> str:
    return f"{number} {one}{'' if number == 1 else 's'}"


def _unit(look: Look) -> list[str]:
    if look.unit is not None:
        return [f"unit = {_text(look.unit)}    # {look.unit_evidence}"]
    if not look.unit_evidence:
        return ["# the headers state the units"]
    why = "" if look.unit_evidence == "?" else f" ({look.unit_evidence})"
    guess = "ppm" if look.isotopes else "wt%"
    return [f"{QUESTION} in which unit are the values, wt%, ppm or ppb?{why}", f"unit = {_text(guess)}"]


def _columns(look: Look) -> list[str]:
    entries = [f"{name} = {_text(look.headers[index])}" for name, index in look.labels.items()]
    ignored = [look.headers[index] for index in look.unused]
    if look.total is not None:
        ignored.append(look.headers[look.total])
    if ignored:
        entries.append(f"ignore = [{', '.join(_text(header) for header in ignored)}]")
    needed = [name for name in ("experiment", "phase") if name not in look.labels]
    pattern = label_pattern(look.texts.get("spot", [])) if needed else None
    if pattern is not None:
        return [*_split_labels(look, entries, pattern), *_unused(look)]
    lines = _columns_line(entries)
    if needed:
        what = " and ".join(f"the {name}" for name in needed)
        stand = "stands" if len(needed) == 1 else "stand"
        lines.append(f"{QUESTION} in which column {stand} {what}? Name it in columns, or give labels.")
    return [*lines, *_unused(look)]


def _columns_line(entries: Sequence[str]) -> list[str]:
    return [f"columns = {{ {', '.join(entries)} }}"] if entries else []


def _split_labels(look: Look, entries: Sequence[str], pattern: str) -> list[str]:
    """One column of labels that hold experiment and phase."""
    example = next(label for label in look.texts["spot"] if label)
    column = look.headers[look.labels["spot"]]
    found = re.compile(pattern).groupindex
    parts = ", ".join(name for name in ("experiment", "phase", "grain", "zone") if name in found)
    return [
        *_columns_line([entry for entry in entries if not entry.startswith("spot =")]),
        f"{QUESTION} is the label (such as {example}) split rightly: {parts}?",
        f"labels = {{ column = {_text(column)}, pattern = '{pattern}' }}",
    ]


def _unused(look: Look) -> list[str]:
    """A column may hold what matters, such as rim and core, under a header that is not known."""
    if not look.unused:
        return []
    columns = "; ".join(_column_shown(look.headers[index], texts) for index, texts in look.unused.items())
    return [
        f"{QUESTION} these columns are not read: {columns}. If one holds the {', '.join(OTHER_LABELS)} or comment, move it "
        "from ignore to that name in columns."
    ]


def _column_shown(header: str, texts: Sequence[str]) -> str:
    return f"{header} ({', '.join(texts)})" if texts else f"{header} (empty)"


def _sigma(look: Look) -> list[str]:
    if look.sigma_pattern is None:
        return [
            f"{QUESTION} no uncertainty columns are recognised. Without them glass in crystals cannot be found and "
            "intervals rest on scatter alone. If there are such columns, state sigma below.",
            '# sigma = { pattern = "{analyte} 1s", level = 1, relative = false }',
        ]
    words = look.sigma_words
    level = words.level if words is not None else None
    relative = words.relative if words is not None else None
    asked = []
    if level is None:
        asked.append("how many standard uncertainties do they give (level 1 or 2)")
    if relative is None:
        asked.append("are they absolute, or relative in per cent")
    lines = [f"{QUESTION} of the uncertainty columns: {'; '.join(asked)}?"] if asked else []
    stated = "true" if relative else "false"
    return [
        *lines,
        f"sigma = {{ pattern = {_text(look.sigma_pattern)}, level = {level or 1}, relative = {stated} }}",
    ]


def _phases(looks: Sequence[Look]) -> list[str]:
    texts = [text for look in looks for text in look.texts.get("phase", [])]
    known, unknown = phases_of(texts)
    lines = ["[ingest.phases]    # name used from here on = spellings in the tables"]
    for name, spellings in sorted(known.items()):
        lines.append(f"{_key(name)} = [{', '.join(_text(text) for text in spellings)}]")
    materials = _material_labels(looks)
    for text, (count, near) in sorted(unknown.items()):
        if text in materials:
            continue
        hint = f" Perhaps {' or '.join(near)}?" if near else ""
        lines.append(
            f'{QUESTION} {_counted(count, "spot")} {"is" if count == 1 else "are"} on "{text}".{hint} Add it to a phase '
            "above, name it here, or give it under [ingest.reference_materials]."
        )
    return [*lines, ""]


def _material_labels(looks: Sequence[Look]) -> list[str]:
    """Phase labels that no phase is called by, on spots without an experiment: reference materials, it seems."""
    found = set()
    for look in looks:
        phases, experiments = look.texts.get("phase"), look.texts.get("experiment")
        if phases is None or experiments is None:
            continue
        _, unknown = phases_of(phases)
        pairs = zip(phases, experiments, strict=True)
        found |= {phase for phase, experiment in pairs if phase in unknown and not experiment}
    return sorted(found)


def _reference_materials(looks: Sequence[Look]) -> list[str]:
    materials = _material_labels(looks)
    if not materials:
        return []
    names = ", ".join(f"{_key(name)} = [{_text(name)}]" for name in materials)
    return [
        "[ingest.reference_materials]",
        f"{QUESTION} are these reference materials? If so give the table of their accepted values in path.",
        '# path = "accepted.csv"    # columns material, analyte, value, unit, sd, source',
        f"names = {{ {names} }}",
        "",
    ]


def _internal_standards(looks: Sequence[Look]) -> list[str]:
    if not any(look.isotopes for look in looks):
        return []
    known, _ = phases_of([text for look in looks for text in look.texts.get("phase", [])])
    assumed = ", ".join(f"{_key(name)} = ..." for name in sorted(known) or ("olivine", "glass"))
    return [
        f"{QUESTION} with which internal-standard values was the laser table made? Concentrations scale with them.",
        "# [[convert.internal_standard]]",
        '# technique = "laser"',
        '# element = "SiO2"',
        '# unit = "wt%"',
        f"# assumed = {{ {assumed} }}    # as assumed when the table was made",
        '# actual = "probe-mean"    # rescaled to what the probe measured on the phase',
        "",
    ]


def _text(value: str) -> str:
    """A TOML basic string; JSON's escapes are TOML's, and whatever does not print is escaped too."""
    text = json.dumps(value, ensure_ascii=False)
    return "".join(c if c.isprintable() else f"\\U{ord(c):08X}" for c in text)


def _one_line(line: str) -> str:
    """The line without anything that could end it: a label in a comment must not become a key."""
    return "".join(c if c.isprintable() else "\N{REPLACEMENT CHARACTER}" for c in line)


def _key(name: str) -> str:
    plain = name.replace("-", "").replace("_", "")
    return name if plain.isascii() and plain.isalnum() else _text(name)
