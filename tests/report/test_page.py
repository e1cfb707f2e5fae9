"""The page in a real browser: it asks for nothing, complains of nothing, sorts, filters, judges and prints."""

from __future__ import annotations

import csv
import io
import json
import re
import shutil
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from report.conftest import FORMULAS, SCRIPT
from sessions import demo_copy
from tieline import runner
from tieline.configuration import Session, load
from tieline.plan import table_path
from tieline.report.compact import script_json
from tieline.report.curves import curves
from tieline.report.page_data import Curve, page_data
from tieline.report.source import Source
from tieline.report.spots import spot_use
from tieline.report.write import write_report
from tieline.storage import read_table

PICTURES = (
    "radius",
    "elements",
    "stripAlpha",
    "stripBeta",
    "tracer",
    "distance",
    "sumsAlpha",
    "sumsBeta",
    "bias",
    "runOrder",
)


def number(text: str) -> float | None:
    return float(text) if text else None


def column(page, place: int) -> list[str]:
    return page.locator(f"#d-table tbody tr td:nth-child({place})").all_inner_texts()


# --- what the file is ---


def test_page_names_no_other_file_or_host(ember_files: dict[str, bytes]):
    text = ember_files["report.html"].decode()
    assert re.findall(r'(?:src|href)="(?!#|data:)', text) == []
    assert "@import" not in text
    assert re.findall(r"url\(", text) == []
    assert set(re.findall(r"https?://[^\s\"'<]+", text)) <= {"http://www.w3.org/2000/svg"}
    assert len(ember_files["report.html"]) < 5_000_000


def test_embedded_data_cannot_end_its_script_element(hostile: Session):
    text = (hostile.run_folder / "report.html").read_text(encoding="utf-8")
    assert text.count("</script>") == 2
    assert SCRIPT not in text
    assert script_json(["</script>", "&", "\u2028"]) == '["\\u003c/script\\u003e","\\u0026","\\u2028"]'


def test_embedded_values_are_those_of_the_stage_files(ember_source: Source):
    data = page_data(ember_source, spot_use(ember_source.tables))
    classify = ember_source.table("classify")
    for name in ("D", "D_sd", "D_lo", "D_hi", "n_alpha", "n_beta"):
        assert data["D"][name] == classify.column(name).to_pylist()
    keys = {}
    for analyte in data["analytes"]:
        start = data["techniques"][analyte["technique"]]["start"]
        for place, value in enumerate(analyte["v"]):
            spot = start + place
            table = data["spots"]["table"]
            keys[table["t"][table["c"][spot]], data["spots"]["row"][spot], analyte["name"]] = value
    checked = 0
    for row in ember_source.table("convert").select(["table", "row", "analyte", "value_ppm"]).to_pylist():
        found = keys[row["table"], row["row"], row["analyte"]]
        if row["value_ppm"] is None:
            assert found is None
        else:
            assert found == pytest.approx(row["value_ppm"], rel=5.1e-5)
            checked += 1
    assert checked > 9000


# --- in the browser ---


@pytest.mark.parametrize(("width", "scheme"), [(1400, "light"), (420, "dark")])
def test_opens_and_draws_without_complaint_or_request(ember: Session, open_page, width: int, scheme: str):
    watched = open_page(ember, viewport={"width": width, "height": 900}, color_scheme=scheme)
    watched.draw_all()
    page = watched.page
    assert watched.complaints == []
    assert [url for url in watched.requests if not url.startswith("data:")] == [page.url]
    for name in PICTURES:
        assert page.locator(f"[data-picture={name}] .mark").count() > 3, name
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    for pair in page.locator("#pick-pair option").all_inner_texts():
        page.select_option("#pick-pair", pair)
        for experiment in ("", "EM-05"):
            page.select_option("#pick-experiment", experiment)
            watched.draw_all()
    assert watched.complaints == []


def test_table_sorts_and_filters(ember: Session, ember_source: Source, open_page):
    page = open_page(ember).page
    classify = ember_source.table("classify").to_pylist()
    assert len(column(page, 1)) == len(classify)
    page.select_option("#filter-pair", "clinopyroxene/glass")
    page.select_option("#filter-class", "compatible")
    want = [row for row in classify if (row["alpha"], row["class"]) == ("clinopyroxene", "compatible")]
    assert len(column(page, 4)) == len(want)
    assert page.inner_text("#d-count") == f"{len(want)} of {len(classify)} D"
    heading = page.locator("#d-table th button", has_text=re.compile("^D$"))
    heading.click()
    shown = [float(text.split("(")[0]) for text in column(page, 4)]
    assert shown == sorted(shown)
    assert page.locator("#d-table th[aria-sort=ascending]").inner_text().startswith("D")
    heading.click()
    assert [float(text.split("(")[0]) for text in column(page, 4)] == sorted(shown, reverse=True)
    page.select_option("#filter-experiment", "EM-05")
    page.select_option("#filter-element", "Ni")
    assert column(page, 3) == ["Ni"]


def test_copied_rows_keep_all_digits(ember: Session, ember_source: Source, open_page):
    page = open_page(ember).page
    page.select_option("#filter-element", "Ni")
    rows = list(csv.DictReader(io.StringIO(page.evaluate("tableAsCsv()"))))
    want = [row for row in ember_source.table("classify").to_pylist() if row["element"] == "Ni"]
    assert [
        (row["experiment"], number(row["D"]), number(row["D_sd"]), number(row["D_hi"])) for row in rows
    ] == [(row["experiment"], row["D"], row["D_sd"], row["D_hi"]) for row in want]


def test_spot_is_chosen_everywhere_by_pointer_and_by_keys(ember: Session, open_page):
    watched = open_page(ember)
    watched.draw_all()
    page = watched.page
    page.locator("[data-picture=stripAlpha] .mark").first.click(force=True)
    spot = page.evaluate("chosen.spot")
    assert page.locator("#spot h2").inner_text() == page.evaluate(f"SPOTS.spot[{spot}]")
    for name in ("stripAlpha", "distance"):
        assert page.locator(f"[data-picture={name}] .mark.sel[data-spot='{spot}']").count() >= 1
    page.keyboard.press("Escape")
    assert page.locator("#spot").is_hidden()
    page.locator("[data-picture=stripAlpha] svg[role]").focus()
    for _ in range(3):
        page.keyboard.press("ArrowRight")
    assert page.locator("[data-picture=stripAlpha] .readout").inner_text().startswith("EM01-ol")
    page.keyboard.press("Enter")
    assert page.locator("#spot h2").is_visible()
    assert watched.complaints == []


def rule(page, spot: str, verdict: str, reason: str) -> None:
    page.evaluate("name => choose({ spot: SPOTS.spot.indexOf(name) })", spot)
    page.check(f"input[name=rule-verdict][value={verdict}]")
    page.fill("#rule-reason", reason)
    page.fill("#rule-analyst", "Q.X.")
    page.fill("#rule-date", "2026-05-04")
    page.click("#rule button[type=submit]")


def lines_of(path: Path) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(path.read_text(encoding="utf-8"), newline="")))


def test_saved_rulings_change_the_next_run(tmp_path: Path, open_page):
    session = load(demo_copy(tmp_path))
    runner.run(session)
    write_report(session)
    before = {row["element"]: row for row in read_table(table_path(session.run_folder, "classify"), "classify").to_pylist()
              if (row["experiment"], row["alpha"]) == ("EM-02", "olivine")}  # fmt: skip
    watched = open_page(session)
    page = watched.page
    rule(page, "EM02-ol-L1", "keep", 'looks sound, "twice" seen')
    rule(page, "EM02-ol-L1", "drop", 'crack, beside a bubble; "deep"')
    page.keyboard.press("Escape")
    assert page.inner_text("#rulings-count") == "3 rulings, 1 new"
    with page.expect_download() as download:
        page.click("#rulings-save")
    assert download.value.suggested_filename == "rulings.csv"
    rulings = session.resolve(session.settings.screen.rulings)
    old = lines_of(rulings)
    shutil.copy(download.value.path(), rulings)
    new = lines_of(rulings)
    assert new[: len(old)] == old
    assert new[len(old) :] == [
        {"spot": "EM02-ol-L1", "analyte": "*", "verdict": "drop", "analyst": "Q.X.", "date": "2026-05-04",
         "reason": 'crack, beside a bubble; "deep"'}
    ]  # fmt: skip
    runner.run(session)
    after = {row["element"]: row for row in read_table(table_path(session.run_folder, "classify"), "classify").to_pylist()
             if (row["experiment"], row["alpha"]) == ("EM-02", "olivine")}  # fmt: skip
    assert after["Co"]["n_alpha"] == before["Co"]["n_alpha"] - 1
    assert after["Co"]["D"] != before["Co"]["D"]
    assert after["Si"]["D"] == before["Si"]["D"]  # from the probe, which the ruling does not touch
    write_report(session)
    again = open_page(session).page
    assert again.inner_text("#rulings-count") == "3 rulings, 0 new"
    assert watched.complaints == []


def test_a_reference_spot_can_be_ruled_out_of_the_calibration(ember: Session, open_page):
    page = open_page(ember).page
    page.evaluate("choose({ spot: SPOTS.spot.indexOf('TWG-1-01') })")
    assert "drop takes it out of the calibration" in page.inner_text("#spot")
    assert page.locator("input[name=rule-verdict]:checked").get_attribute("value") == "drop"
    rule(page, "TWG-1-01", "drop", "inclusion")
    lines = csv.DictReader(io.StringIO(page.evaluate("rulingsCsv()")))
    assert ("TWG-1-01", "*", "drop") in {(one["spot"], one["analyte"], one["verdict"]) for one in lines}


def test_hostile_labels_show_as_text(hostile: Session, open_page):
    watched = open_page(hostile)
    watched.draw_all()
    page = watched.page
    assert SCRIPT in column(page, 1)
    page.evaluate("choose({ spot: SPOTS.spot.indexOf('=1+1') })")
    assert page.inner_text("#spot h2") == FORMULAS[0]
    assert "onerror=alert(2)" in page.inner_text("#spot")
    assert page.locator("img").count() == 0
    assert page.locator("script").count() == 2
    copied = list(csv.reader(io.StringIO(page.evaluate("tableAsCsv()"))))
    assert not [cell for row in copied for cell in row if cell.startswith(("=", "+", "@"))]
    rule(page, FORMULAS[0], "drop", "=1+1")
    assert next(csv.DictReader(io.StringIO(page.evaluate("rulingsCsv()"))))["spot"] == FORMULAS[0]
    assert watched.complaints == []


def test_every_control_has_a_name_and_pictures_say_what_they_show(ember: Session, open_page):
    watched = open_page(ember)
    watched.draw_all()
    nameless = watched.page.evaluate(
        """() => [...document.querySelectorAll("button, select, input")].filter((one) =>
        !(one.textContent.trim() && one.tagName === "BUTTON") && !one.getAttribute("aria-label") && !one.labels?.length)
        .map((one) => one.outerHTML.slice(0, 80))"""
    )
    assert nameless == []
    labels = watched.page.evaluate(
        "[...document.querySelectorAll('svg[role]')].map((one) => one.getAttribute('aria-label'))"
    )
    assert len(labels) >= len(PICTURES)
    assert all("point" in label for label in labels)
    order = watched.page.evaluate(
        "[...document.querySelectorAll('h1, h2, h3')].map((one) => Number(one.tagName[1]))"
    )
    assert order[0] == 1
    assert all(after - before <= 1 for before, after in pairwise(order))


def test_contrast_of_text_is_readable(ember: Session, open_page):
    """Contrast of 4.5 for text in both schemes (WCAG 2.1, success criterion 1.4.3)."""
    for scheme in ("light", "dark"):
        page = open_page(ember, color_scheme=scheme).page
        colours = page.evaluate(
            """() => Object.fromEntries(["paper", "sheet", "ink", "soft", "link", "warn"].map((name) =>
            [name, getComputedStyle(document.documentElement).getPropertyValue("--" + name).trim()]))"""
        )
        for name in ("ink", "soft", "link", "warn"):
            for ground in ("paper", "sheet"):
                assert contrast(colours[name], colours[ground]) >= 4.5, (scheme, name, ground)


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours (WCAG 2.1, relative luminance)."""
    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def luminance(colour: str) -> float:
    digits = colour.lstrip("#")
    digits = "".join(2 * digit for digit in digits) if len(digits) == 3 else digits
    parts = [int(digits[at : at + 2], 16) / 255 for at in (0, 2, 4)]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def test_print_shows_tables_and_pictures_but_no_controls(ember: Session, open_page):
    watched = open_page(ember)
    page = watched.page
    page.evaluate("dispatchEvent(new Event('beforeprint'))")
    page.emulate_media(media="print")
    assert page.locator(".choices").is_hidden()
    assert page.locator("#d-table").is_visible()
    for name in PICTURES:
        assert page.locator(f"[data-picture={name}] .mark").count() > 3, name


def test_curves_and_checks_are_drawn_where_there_are_any(
    ember_source: Source, ember: Session, open_page, tmp_path: Path
):
    radius, D = [0.8, 1.0, 1.2], [0.1, 0.5, 0.1]
    curve = Curve(
        "EM-05", "clinopyroxene", "glass", "3+ on M2", radius, D, [0.05, 0.4, 0.05], [0.2, 0.6, 0.2]
    )
    data = page_data(ember_source, spot_use(ember_source.tables), [curve])
    check = {"check": "exchange", "experiment": "EM-05", "alpha": "olivine", "beta": "glass", "subject": "Fe-Mg",
             "value": 0.31, "sd": 0.01, "expected_lo": 0.27, "expected_hi": 0.33,
             "verdict": "consistent", "detail": ""}  # fmt: skip
    watched = open_page(ember)
    page = watched.page
    page.evaluate(
        "data => { DATA.curves = data.curves; DATA.checks = data.checks; }",
        {"curves": data["curves"], "checks": [check]},
    )
    page.select_option("#pick-pair", "clinopyroxene/glass")
    watched.draw_all()
    assert (
        page.locator("[data-picture=radius] svg[role] .line.fit").count() == 1
    )  # bands for one experiment only
    page.select_option("#pick-experiment", "EM-05")
    watched.draw_all()
    assert page.locator("[data-picture=radius] svg[role] .line.fit").count() == 3
    page.evaluate(
        "() => { const holder = document.querySelector('[data-picture=radius]'); plot(holder, PICTURES.checks()); }"
    )
    assert page.locator("[data-picture=radius] svg[role] .mark").count() == 1
    assert watched.complaints == []


def test_fitted_curves_of_the_run_go_through_their_points(ember_source: Source):
    made = curves(ember_source)
    fitted = [row for row in ember_source.table("assess.curves").to_pylist() if row["verdict"] == "fitted"]
    assert len(made) == len(fitted) > 10
    for curve in made:
        assert np.all(np.array(curve.D_lo) <= curve.D)
        assert np.all(np.array(curve.D_hi) >= curve.D)
    rows = ember_source.table("assess.elements").to_pylist()
    first = next(
        one for one in made if (one.experiment, one.alpha, one.label[:2]) == ("EM-05", "olivine", "3+")
    )
    own = [row for row in rows if (row["experiment"], row["alpha"], row["charge"]) == ("EM-05", "olivine", 3)]
    for row in own:
        if row["role"] == "fitted":
            ln_D = np.interp(row["radius_angstrom"], first.radius, np.log(first.D))
            assert ln_D == pytest.approx(np.log(row["curve_D"]), abs=0.02)


def test_json_of_the_page_is_valid(ember_files: dict[str, bytes]):
    text = ember_files["report.html"].decode()
    block = re.search(r'<script type="application/json" id="data">(.*?)</script>', text, re.DOTALL)
    assert block is not None
    assert json.loads(block.group(1))["session"] == "ember"
