"""The script a scientist would write for the same tables: pandas groups, one `uncertainties` number per cell.

    python tests/benchmarks/baseline_script.py spots.csv D.csv

The baseline of `chain.py`. It does far less than the chain: no checks, no detection limits beyond leaving out
what is below them, no screening, no calibration, plain means, D with a standard uncertainty and no interval.
"""

from __future__ import annotations

import sys

import pandas as pd
from uncertainties import UFloat, ufloat


def read(path: str) -> tuple[pd.DataFrame, list[str]]:
    """The spot table with one column of uncertain numbers per analyte; a cell below its limit is None."""
    table = pd.read_csv(path, dtype=str, keep_default_na=False)
    headers = [name for name in table.columns if name.endswith(("(wt%)", "ppm"))]
    analytes = []
    for header in headers:
        name = header.split()[0]
        table[name] = [
            None if cell.startswith("<") or not cell else ufloat(float(cell), float(sigma))
            for cell, sigma in zip(table[header], table[f"{name} 1s"], strict=True)
        ]
        analytes.append(name)
    return table[table["Run"] != ""], analytes


def mean(values: pd.Series) -> UFloat | None:
    measured = [value for value in values if value is not None]
    return sum(measured) / len(measured) if measured else None


def reduce(path: str, out: str) -> int:
    """Writes D with its standard uncertainty of every experiment, crystal and analyte; returns how many."""
    table, analytes = read(path)
    means = {key: group[analytes].apply(mean) for key, group in table.groupby(["Run", "Phase"])}
    rows = []
    for (run, phase), crystal in means.items():
        if phase == "glass" or (run, "glass") not in means:
            continue
        glass = means[(run, "glass")]
        for name in analytes:
            if crystal[name] is None or glass[name] is None:
                continue
            D = crystal[name] / glass[name]
            rows.append((run, phase, name, D.nominal_value, D.std_dev))
    pd.DataFrame(rows, columns=["run", "phase", "element", "D", "D_sd"]).to_csv(out, index=False)
    return len(rows)


if __name__ == "__main__":
    print(reduce(sys.argv[1], sys.argv[2]))
