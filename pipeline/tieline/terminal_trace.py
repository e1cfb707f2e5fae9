"""The page that `trace` prints: a tree from D to the cells, with enough digits to recompute it by hand."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from rich.table import Table
from rich.text import Text
from rich.tree import Tree

from tieline.terminal_console import console as new_console
from tieline.terminal_console import printable

Row = Mapping[str, Any]
DIGITS = 7


def show_trace(page: Row) -> None:
    """Prints the tree of one D."""
    console = new_console()
    console.print(trace_tree(page))


def trace_tree(page: Row) -> Tree:
    """The page as a tree of lines and small tables."""
    result = page["result"]
    title = (
        f"D {page['element']} {page['alpha']}/{page['beta']} in {page['experiment']} = {result['written']}"
    )
    tree = Tree(Text(title, style="bold"), guide_style="dim")
    _add_result(tree, page)
    _add_budget(tree, page)
    _add_interval(tree, page["interval"])
    _add_class(tree, page["classification"])
    told: set[str] = set()
    for side in ("alpha", "beta"):
        _add_phase(tree, side, page[f"{side}_phase"], told)
    if page["alternatives"]:
        branch = _branch(tree, f"means that could have been taken; {page['alternatives'][0]['reason']}")
        for other in page["alternatives"]:
            means = (
                f"{side} {other[f'batch_{side}']}, {other[f'analyte_{side}']}" for side in ("alpha", "beta")
            )
            branch.add(Text("; ".join(means)))
    return tree


def _add_result(tree: Tree, page: Row) -> None:
    result = page["result"]
    alpha, beta = page["alpha_phase"]["mean"], page["beta_phase"]["mean"]
    branch = _branch(tree, f"{result['kind']}{': ' + result['reason'] if result['reason'] else ''}")
    if result["D"] is not None and alpha["mean_ppm"] is not None and beta["mean_ppm"] is not None:
        branch.add(Text(f"D = {_n(alpha['mean_ppm'])} / {_n(beta['mean_ppm'])} = {_n(result['D'])}"))
    elif result["D"] is not None:
        branch.add(Text(f"D = {_n(result['D'])}"))
    low, high = _n(result["D_lo"]), _n(result["D_hi"])
    branch.add(Text(f"D_sd = {_n(result['D_sd'])};  interval at {result['confidence']:.4g}: {low} to {high}"))
    if not result["complete"]:
        branch.add(Text("not complete: D needs an uncertainty that is unknown, and is given no class"))


def _add_budget(tree: Tree, page: Row) -> None:
    lines = [line for line in page["budget"] if line["cancels"] or line["alpha"] or line["beta"]]
    widened = any(line[f"widening_{side}"] != 1.0 for line in lines for side in ("alpha", "beta"))
    names = ["relative sd", page["alpha"], page["beta"], *(["w", "w"] if widened else []), "share"]
    table = _table(*names)
    for line in lines:
        widths = [_n(line[f"widening_{side}"]) if line[side] else "" for side in ("alpha", "beta")]
        share = "cancels" if line["cancels"] else "unknown" if line["unknown"] else _n(line["share"], 5)
        row = [line["source"], *(_n(line[side]) for side in ("alpha", "beta"))]
        table.add_row(*row, *(widths if widened else []), share)
    branch = _branch(tree, "uncertainty budget: shares of the sum of squares")
    branch.add(table)
    for line in page["budget"]:
        if line["unknown"]:
            branch.add(Text(f"{line['source']}: needed, and nothing tells how uncertain it is"))
        if line["source"] == "drift" and (line["alpha"] or line["beta"]):
            branch.add(Text(f"drift: shift of each mean; its square in the budget: {_n(line['squared'])}"))
    _add_how(branch, page["result"]["how"])


def _add_interval(tree: Tree, interval: Row) -> None:
    branch = _branch(tree, f"interval by {interval['method']}")
    names = {
        "u_alpha": "u_a", "u_beta": "u_b", "dof": "dof", "t": "q = t", "z": "q = z",
        "r_alpha": "r_a", "r_beta": "r_b", "r_u": "r_u", "exponent": "x", "dof_alpha": "dof_a", "dof_beta": "dof_b",
        "V_alpha": "V_a", "V_beta": "V_b", "V_alpha_counting": "V_a by counting", "V_beta_counting": "V_b by counting",
    }  # fmt: skip
    branch.add(Text(_pairs(interval, names)))
    for name, words in (
        ("ends_by_scatter", "ends by scatter, t"),
        ("ends_by_counting", "ends by counting, z"),
    ):
        if name in interval:
            branch.add(Text(f"{words}: {' to '.join(_n(end) for end in interval[name])}"))
    for side in ("alpha", "beta"):
        limits = interval.get(f"limits_{side}")
        if limits is not None:
            text = f"{side}: mean {_n(limits['mean_ppm'])}, limits {_n(limits['low_ppm'])} to {_n(limits['high_ppm'])} ppm"
            branch.add(Text(f"{text}, n = {limits['n']}, {limits['n_limits_only']} known only as limits"))
    _add_how(branch, interval["how"])


def _add_class(tree: Tree, account: Row) -> None:
    branch = _branch(tree, f"class: {account['class']}")
    names = {
        "p_compatible": "p compatible",
        "p_incompatible": "incompatible",
        "p_highly_incompatible": "highly incompatible",
    }
    branch.add(Text("  ".join(f"{words} {_p(account[name])}" for name, words in names.items())))
    branch.add(Text(f"needed at each boundary {_n(account['needed'])}"))
    for one in account["boundaries"]:
        branch.add(
            Text(
                f"B = {_n(one['value'])}: by scatter {_n(one['pivot'], 5)}, P {_p(one['p_above'])}; "
                f"by counting {_n(one['pivot_by_counting'], 5)}, P {_p(one['p_above_by_counting'])}"
            )
        )
    _add_how(branch, account["how"])


def _add_phase(tree: Tree, side: str, phase: Row, told: set[str]) -> None:
    title = f"{side}: {phase['phase']}, {phase['analyte']} by {phase['technique']}, batch {phase['batch']}"
    branch = _branch(tree, title)
    _add_mean(branch, phase["mean"], told)
    _add_conversion(branch, phase, told)
    _add_calibration(branch, phase["calibration"], told)
    if phase["drift"] is not None:
        drift = {name: _n(number) for name, number in phase["drift"].items()}
        text = f"drift: {drift['per_place']} × ({drift['mean_place']} − {drift['centre']}) = {drift['shift']}"
        branch.add(Text(f"{text}, mean place of the spots used less the centre of the run"))
    spots = _branch(branch, f"spots used: {len(phase['spots_used'])}, from {_files(phase)}")
    spots.add(_used_table(phase))
    for spot in phase["spots_used"]:
        for finding in spot["findings"]:
            spots.add(Text(f"{spot['spot']}: {_finding(finding)}"))
    if phase["spots_left_out"]:
        left = _branch(branch, f"spots left out: {len(phase['spots_left_out'])}")
        for spot in phase["spots_left_out"]:
            _add_left_out(left, spot)


def _add_mean(branch: Tree, mean: Row, told: set[str]) -> None:
    names = {"mean_ppm": "m", "se_ppm": "se", "counting_se_ppm": "counting se", "dof": "dof", "n": "n"}
    numbers = _pairs(mean, names)
    node = _branch(branch, f"mean ({mean['estimator']})" + (f", ppm: {numbers}" if numbers else ""))
    steps = {
        "tau_ppm": "τ", "sum_p2_v": "Σp²v", "sum_p_d2": "Σp(x − m)²", "sum_p_1p_v": "Σp(1 − p)v",
        "sum_p2_counting": "Σp²σ²", "sigma_slope_per_ppm": "k", "scale_ppm": "scale", "constant": "c",
        "common_ppm": "in common", "mswd": "mswd",
    }  # fmt: skip
    text = _pairs(mean, {name: words for name, words in steps.items() if mean.get(name) is not None})
    if text:
        node.add(Text(text))
    _add_how(node, mean["how"], told)
    for unit, weight in zip(mean.get("units") or (), mean.get("weights") or (), strict=False):
        node.add(
            Text(f"grain of {unit['n']}: x {_n(unit['mean_ppm'])}, σ {_n(unit['sd_ppm'])}, p {_n(weight, 6)}")
        )
    if not mean["agrees"]:
        node.add(Text("this page does not come to the mean that the run recorded", style="bold red"))


def _add_conversion(branch: Tree, phase: Row, told: set[str]) -> None:
    units, standard = phase["units"], phase["internal_standard"]
    factor = ""
    if standard is not None:
        own = f"{_n(standard['actual_ppm'], 9)} / assumed"
        factor = f" × {own if standard['factor'] is None else _n(standard['factor'], 9)}"
    formula = f"x = cell × {units['ppm_per_unit']:g} × {_n(units['element_fraction'], 9)}{factor}"
    node = _branch(
        branch, f"{formula} (ppm per {units['unit']}, mass fraction{', internal standard' if factor else ''})"
    )
    sigma = units["sigma"]
    if sigma is not None:
        what = "per cent of the value" if sigma["relative_percent"] else units["unit"]
        node.add(Text(f"σ cell: {what}, divided by {sigma['divided_by']:g}; then the same factors"))
    if standard is not None:
        _add_standard(node, standard, told)


def _add_standard(node: Tree, standard: Row, told: set[str]) -> None:
    actual = _n(standard["actual_ppm"], 9)
    quotient = "assumed spot by spot"
    if standard["factor"] is not None:
        quotient = f"{_n(standard['assumed_ppm'], 9)} = {_n(standard['factor'], 9)}"
    dof = "" if standard["dof"] is None else f", dof {_n(standard['dof'])}"
    text = (
        f"internal standard {standard['element']}: {actual} / {quotient}, relative sd {_n(standard['relative_sd'])}"
        f"{dof}; actual: {standard['source']}"
    )
    own = _branch(node, text)
    if standard["assumed_ppm"] is not None:
        assumed = standard["assumed_ppm"] / standard["ppm_per_unit"]
        own.add(
            Text(
                f"assumed: {_n(assumed)} {standard['unit']} × {_n(standard['ppm_per_unit'], 9)} ppm per {standard['unit']}"
            )
        )
    _add_how(own, standard["how"], told)
    for spot in standard.get("spots", ()):
        cell = f"{spot['analyte']} {spot['raw']} {spot['unit']} = {_n(spot['value_ppm'])} ppm, σ {_n(spot['sigma_ppm'])}"
        own.add(Text(printable(f"{spot['spot']}, {spot['table']} row {spot['row']}: {cell}")))
    mean = standard.get("mean")
    if mean is not None:
        names = {
            "mean_ppm": "m", "se_ppm": "se", "counting_se_ppm": "counting se", "scale_ppm": "scale", "constant": "c",
            "counting_constant": "e", "n": "n",
        }  # fmt: skip
        own.add(Text(_pairs(mean, names)))
        _add_how(own, mean["how"], told)
        _add_calibration(own, standard["calibration"], told, "calibration of the standard")


def _add_calibration(
    branch: Tree, calibration: Row | None, told: set[str], title: str = "calibration"
) -> None:
    if calibration is None:
        branch.add(Text(f"{title}: technique, batch and column have no row in calibrate"))
        return
    names = {
        "relative_sd": "relative sd",
        "relative_dof": "dof",
        "matrix_sd": "matrix sd",
        "factor": "factor",
    }
    cancels = "; both phases share it, its error cancels" if calibration["cancels"] else ""
    node = _branch(branch, f"{title} from {calibration['origin']}: {_pairs(calibration, names)}{cancels}")
    if calibration["drift_applied"]:
        drift, centre = _n(calibration["drift_applied"]), _n(calibration["drift_centre"])
        node.add(Text(f"x is divided by factor × (1 + {drift} × (place − {centre}))"))
    if calibration["drift_left"]:
        node.add(Text(f"drift left in the values: {_n(calibration['drift_left'])} per place in the run"))
    if calibration["bias"] is not None:
        between = calibration.get("between_sd")
        apart = f", τ {_n(between)}" if len(calibration["materials"]) > 1 else ""
        node.add(Text(f"bias {_n(calibration['bias'])} ± {_n(calibration['bias_se'])}{apart}"))
    for one in calibration["materials"]:
        measured = f"{_n(one['measured_ppm'])} ± {_n(one['measured_se_ppm'])}"
        accepted = f"{_n(one['accepted_ppm'])} ± {_n(one['accepted_sd_ppm'])}"
        part = "left out" if one["weight"] is None else f"p {_n(one['weight'])}"
        ratio = f"{_n(one['ratio'])} ± {_n(one['ratio_se'])}, {part}"
        text = f"{one['material']}: {measured} / {accepted} = {ratio}; accepted: {one['source'] or 'no source given'}"
        material = _branch(node, text)
        if text in told:
            material.add(Text("its spots as above"))
            continue
        told.add(text)
        # One line per number of all spots: reference materials have many.
        for name, words in (("row", "rows"), ("place", "places"), ("value_ppm", "x"), ("sigma_ppm", "σ")):
            numbers = ", ".join(_n(spot.get(name)) for spot in one["spots"])
            if name != "place" or calibration["drift_applied"] or calibration["drift_left"]:
                material.add(Text(f"{words}: {numbers}"))
    for one in calibration["ruled_out"]:
        where = f"{one['spot']} ({one['table']} row {one['row']}; {_n(one['value_ppm'])} ppm)"
        who = f"{one['analyst']}, {one['date']}: {one['reason']}"
        text = f"ruled out of {one['material']}: {where} by {who}"
        if text not in told:
            _branch(node, text)
        told.add(text)
    _add_how(node, calibration["how"], told)


def _used_table(phase: Row) -> Table:
    corrected = any(abs(spot.get("calibration_factor", 1.0) - 1.0) > 0 for spot in phase["spots_used"])
    other = any("other_factor" in spot for spot in phase["spots_used"])
    unmixed = any("measured_ppm" in spot for spot in phase["spots_used"])
    assumed = any("assumed" in spot for spot in phase["spots_used"])
    reused = phase["mean"].get("sigma_slope_per_ppm") is not None
    columns = phase["spots_used"][0]["cells"] if phase["spots_used"] else None
    value, sigma = (_column(columns, name) for name in ("value", "sigma"))
    extra = [
        name
        for name, shown in (
            ("assumed ppm", assumed),
            ("other", other),
            ("÷ cal", corrected),
            ("before unmixing", unmixed),
        )
        if shown
    ]
    names = ["spot", "row", value, sigma, *extra, "x ppm", "σ ppm", *(["σ used"] if reused else []), "p"]
    table = _table(*names)
    for spot in phase["spots_used"]:
        cells = spot["cells"] or {}
        row = [
            printable(spot["spot"]),
            str(spot["row"]),
            _raw(cells.get("value"), spot["raw"]),
            _raw(cells.get("sigma"), ""),
        ]
        row += [_n(spot["assumed"]["ppm"]) if "assumed" in spot else ""] if assumed else []
        row += [_n(spot.get("other_factor", 1.0))] if other else []
        row += [_n(spot.get("calibration_factor", 1.0))] if corrected else []
        row += [_n(spot.get("measured_ppm"))] if unmixed else []
        row.append(_n(spot["value_ppm"]) if spot["value_ppm"] is not None else f"<{_n(spot['limit_ppm'])}")
        row.append(_n(spot["sigma_ppm"], 6))
        row += [_n(spot.get("sigma_used_ppm"), 6)] if reused else []
        table.add_row(*row, _n(spot.get("weight")))
    return table


def _add_left_out(branch: Tree, spot: Row) -> None:
    cells = spot["cells"] or {}
    where = f"{spot['table']} row {spot['row']}"
    value = f"{_column(cells, 'value')} {_raw(cells.get('value'), spot['raw'])} = {_n(spot['value_ppm'])} ppm"
    node = _branch(branch, f"{spot['spot']} ({where}; {value}): {spot['why']}")
    for finding in spot["findings"]:
        node.add(Text(_finding(finding)))


def _finding(finding: Row) -> str:
    what = "" if finding["analyte"] is None else f" of {finding['analyte']}"
    if finding["code"] == "ruling":
        who = f"{finding['analyst']}, {finding['date']}"
        return printable(f"ruling{what}: {finding['action']} by {who}: {finding['reason']}")
    numbers = _pairs(finding, {"statistic": "statistic", "threshold": "threshold", "p_value": "p"})
    return printable(f"{finding['code']}{what} ({finding['action']}): {numbers}; {finding['detail']}")


def _files(phase: Row) -> str:
    spots = [*phase["spots_used"], *phase["spots_left_out"]]
    return printable(", ".join(dict.fromkeys(str(spot["table"]) for spot in spots)))


def _column(cells: Row | None, name: str) -> str:
    cell = (cells or {}).get(name)
    return printable(cell["column"]) if cell is not None else {"value": "cell", "sigma": "no σ"}[name]


def _raw(cell: Row | None, otherwise: str) -> str:
    return printable(cell["raw"] if cell is not None else otherwise)


def _branch(tree: Tree, text: str) -> Tree:
    return tree.add(Text(printable(text)))


def _add_how(branch: Tree, lines: Iterable[str], told: set[str] | None = None) -> None:
    """Formulas, each once on a page."""
    for line in lines:
        if told is None or line not in told:
            branch.add(Text(line, style="dim"))
        if told is not None:
            told.add(line)


def _pairs(row: Row, names: Mapping[str, str]) -> str:
    return "  ".join(f"{words} {_n(row[name])}" for name, words in names.items() if row.get(name) is not None)


def _n(number: float | None, digits: int = DIGITS) -> str:
    return "none" if number is None else f"{number:.{digits}g}"


def _p(probability: float | None) -> str:
    return "none" if probability is None else f"{probability:.6f}"


def _table(*names: str) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 1, 0, 0))
    for position, name in enumerate(names):
        table.add_column(name, justify="left" if position == 0 else "right")
    return table
