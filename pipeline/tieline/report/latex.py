"""LaTeX: text that cannot act as a command, and the table of D as a document that compiles by itself."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from tieline.notation import written
from tieline.report.conventions import conventions, percent
from tieline.report.source import Source

_SPECIAL = {
    "\\": r"\textbackslash{}", "{": r"\{", "}": r"\}", "$": r"\$", "&": r"\&", "#": r"\#", "%": r"\%", "_": r"\_",
    "^": r"\textasciicircum{}", "~": r"\textasciitilde{}", "<": r"\textless{}", ">": r"\textgreater{}",
    "|": r"\textbar{}", '"': r"\textquotedbl{}", "'": r"\textquotesingle{}", "`": r"\textasciigrave{}", "-": "{-}",
    "\N{EN DASH}": "--", "\N{EM DASH}": "---", "\N{MINUS SIGN}": "$-$", "\N{MULTIPLICATION SIGN}": r"$\times$",
    "\N{PLUS-MINUS SIGN}": r"$\pm$", "\N{MICRO SIGN}": r"$\mu$", "\N{GREEK SMALL LETTER MU}": r"$\mu$",
    "\N{DEGREE SIGN}": r"\textdegree{}", "\N{NO-BREAK SPACE}": "~", "\N{SUPERSCRIPT TWO}": r"$^2$",
    "\N{GREEK SMALL LETTER ALPHA}": r"$\alpha$", "\N{GREEK SMALL LETTER BETA}": r"$\beta$",
    "\N{GREEK SMALL LETTER SIGMA}": r"$\sigma$", "\N{LEFT SINGLE QUOTATION MARK}": "`",
    "\N{RIGHT SINGLE QUOTATION MARK}": "'", "\N{HORIZONTAL ELLIPSIS}": r"\ldots{}",
}  # fmt: skip
# Letters that the T1 encoding prints; anything beyond is shown by its code point instead of stopping the engine.
_LATIN = range(0xC0, 0x180)
_NOT_IN_T1 = frozenset((0xD7, 0xF7))

PREAMBLE = r"""\documentclass[11pt]{article}
\usepackage[T1]{fontenc}
\usepackage[utf8]{inputenc}
\usepackage{textcomp}
\usepackage[margin=20mm]{geometry}
"""
EXPERIMENTS_PER_BLOCK = 5


def escaped(text: str) -> str:
    """The text as LaTeX prints it, control characters dropped."""
    return "".join(_character(character) for character in text)


def _character(character: str) -> str:
    if character in _SPECIAL:
        return _SPECIAL[character]
    code = ord(character)
    if 32 <= code < 127 or (code in _LATIN and code not in _NOT_IN_T1):
        return character
    if character in "\n\t\r":
        return " "
    return rf"\texttt{{U+{code:04X}}}" if character.isprintable() else ""


def partition_document(source: Source) -> str:
    """One long table per pair and five experiments; elements down, experiments across."""
    columns = [
        "experiment",
        "alpha",
        "beta",
        "element",
        "D",
        "D_sd",
        "D_lo",
        "D_hi",
        "kind",
        "n_alpha",
        "n_beta",
    ]
    rows = source.table("classify").select(columns).to_pylist()
    level = percent(source.confidence)
    lines = [
        "% Partition coefficients; compiles by itself. In a manuscript, take the longtable environments and load",
        "% booktabs and longtable.",
        f"% Made by tieline {source.version}; fingerprint {source.fingerprint}",
        PREAMBLE + "\\usepackage{booktabs,longtable}\n\\begin{document}\n\\small",
        f"\\section*{{Partition coefficients, {escaped(source.title)}}}",
        *(
            f"\\noindent {escaped(term)}: {escaped(meaning)}.\\par"
            for term, meaning in conventions(source.confidence)
        ),
    ]
    for alpha, beta in dict.fromkeys((row["alpha"], row["beta"]) for row in rows):
        own = [row for row in rows if (row["alpha"], row["beta"]) == (alpha, beta)]
        experiments = list(dict.fromkeys(row["experiment"] for row in own))
        for start in range(0, len(experiments), EXPERIMENTS_PER_BLOCK):
            lines += _block(own, experiments[start : start + EXPERIMENTS_PER_BLOCK], f"{alpha}/{beta}", level)
    return "\n".join([*lines, "\\end{document}", ""])


def _block(rows: Sequence[dict[str, Any]], experiments: Sequence[str], pair: str, level: str) -> list[str]:
    caption = (
        f"$D$ {escaped(pair)} by mass. In parentheses one standard uncertainty in the last digits; "
        f"\\textless{{}} and \\textgreater{{}}: limits at {escaped(level)} confidence; $n$: spots in alpha and beta, "
        "as a range over the elements."
    )
    head = " & ".join(["", *(escaped(experiment) for experiment in experiments)]) + r" \\"
    cells = {(row["element"], row["experiment"]): row for row in rows}
    body = [
        " & ".join([escaped(element), *(_cell(cells.get((element, name))) for name in experiments)]) + r" \\"
        for element in dict.fromkeys(row["element"] for row in rows)
    ]
    numbers = " & ".join(["$n$", *(_n_range(rows, experiment) for experiment in experiments)]) + r" \\"
    return [
        rf"\begin{{longtable}}{{l*{{{len(experiments)}}}{{r}}}}",
        rf"\caption{{{caption}}}\\",
        rf"\toprule {head} \midrule\endfirsthead",
        rf"\toprule {head} \midrule\endhead",
        r"\bottomrule\endfoot",
        *body,
        r"\midrule",
        numbers,
        r"\end{longtable}",
    ]


def _cell(row: dict[str, Any] | None) -> str:
    return "" if row is None else escaped(written(row)).replace("{-}", "$-$")


def _n_range(rows: Sequence[dict[str, Any]], experiment: str) -> str:
    own = [row for row in rows if row["experiment"] == experiment]
    return ", ".join(_range([row[name] for row in own]) for name in ("n_alpha", "n_beta"))


def _range(numbers: Sequence[int]) -> str:
    low, high = min(numbers), max(numbers)
    return str(low) if low == high else f"{low}--{high}"
