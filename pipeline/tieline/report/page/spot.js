// One spot: everything about it beside the pictures, and the rulings a person makes.

const spotName = (spot) => SPOTS.spot[spot];
const RULED = DATA.rulings.map(([spot, analyte, verdict, analyst, date, reason, table]) => ({ spot, analyte, verdict, analyst, date, reason, table, filed: true }));
let unsaved = false;
const labelCount = new Map();
SPOTS.spot.forEach((name) => labelCount.set(name, (labelCount.get(name) || 0) + 1));

function showSpot() {
  const panel = document.getElementById("spot"), spot = chosen.spot;
  document.querySelectorAll(".mark.sel").forEach((mark) => mark.classList.remove("sel"));
  panel.hidden = spot === null;
  document.body.classList.toggle("with-spot", spot !== null);
  if (spot === null) return;
  document.querySelectorAll(`.mark[data-spot="${spot}"]`).forEach((mark) => mark.classList.add("sel"));
  const close = make("button", { type: "button", class: "close", "aria-label": "Close", onclick: () => choose({ spot: null }) }, "×");
  panel.replaceChildren(make("header", {}, make("h2", { tabindex: -1 }, spotName(spot)), close), summaryOf(spot), findingsOf(spot), rulingForm(spot), valuesOf(spot));
  panel.scrollTop = 0;
}

function summaryOf(spot) {
  const rows = [["experiment", spotExperiment[spot]], ["phase", spotPhase[spot]], ["technique", text(SPOTS.technique, spot)], ["batch", text(SPOTS.batch, spot)], ["grain", text(SPOTS.grain, spot)], ["zone", text(SPOTS.zone, spot)],
    ["distance", known(SPOTS.distance[spot]) ? `${number(SPOTS.distance[spot])} µm` : null], ["source", `${text(SPOTS.table, spot)}, row ${SPOTS.row[spot]}`], ["place in the run", SPOTS.sequence[spot]], ["comment", SPOTS.comment[spot] || null]];
  const at = DATA.sums.spot.indexOf(spot);
  if (at >= 0) rows.push(["oxide total", `${number(DATA.sums.total[at], 5)} ± ${number(DATA.sums.total_sd[at], 2)} wt%`], ["cation sum", known(DATA.sums.cations[at]) ? `${number(DATA.sums.cations[at], 4)} ± ${number(DATA.sums.cations_sd[at], 2)}` : null]);
  const used = SPOTS.used[spot], all = SPOTS.values[spot];
  const state = text(SPOTS.material, spot) !== null ? "reference material" : used === all ? `used: all ${all} values` : used ? `used: ${used} of ${all} values` : `left out: all ${all} values`;
  return make("div", {}, make("p", { class: `state ${used ? "" : "is-out"}` }, state), make("dl", {}, rows.filter(([, value]) => value !== null).map(([name, value]) => [make("dt", {}, name), make("dd", {}, String(value))])));
}

function findingsOf(spot) {
  const own = DATA.findings.filter(([at]) => at === spot);
  if (!own.length) return make("p", { class: "note" }, "No test and no person remarked on it.");
  return make("ul", { class: "findings" }, own.map(([, analyte, code, statistic, threshold, p, action, detail]) =>
    make("li", {}, make("b", {}, `${code} (${action})`), ` ${analyte === null ? "" : analyte + ": "}${detail}`, known(statistic) && known(threshold) ? make("span", { class: "note" }, ` statistic ${number(statistic, 3)}, threshold ${number(threshold, 3)}${known(p) ? `, p ${p ? number(p, 2) : "below 1e-300"}` : ""}`) : null)));
}

function valuesOf(spot) {
  const means = new Map();
  DATA.means.mean_ppm.forEach((mean, at) => means.set([text(DATA.means.experiment, at), text(DATA.means.phase, at), text(DATA.means.technique, at), text(DATA.means.analyte, at)].join("|"), at));
  const rows = [];
  for (const analyte of DATA.analytes) {
    const cell = measured(analyte, spot);
    if (!cell) continue;
    const at = means.get([spotExperiment[spot], spotPhase[spot], DATA.techniques[analyte.technique].name, analyte.name].join("|"));
    const mean = at === undefined ? null : DATA.means.mean_ppm[at], sd = at === undefined ? null : Math.hypot(cell.sigma || 0, DATA.means.spread_sd_ppm[at] || 0);
    const off = known(mean) && cell.value !== null && sd > 0 ? (cell.value - mean) / sd : null;
    rows.push(make("tr", { class: cell.used ? null : "is-out" }, make("th", { scope: "row" }, analyte.name), make("td", { class: "num" }, cell.value === null ? `<${number(cell.limit, 3)}` : number(cell.value)), make("td", { class: "num" }, cell.sigma === null ? "" : number(cell.sigma, 2)), make("td", { class: "num" }, number(cell.limit, 2)), make("td", { class: "num" }, off === null ? "" : signed(off)), make("td", {}, cell.why)));
  }
  const heads = ["analyte", "ppm", "σ", "limit", "off", "left out"];
  return make("div", { class: "scroll" }, make("table", {}, make("caption", {}, "Values as element, µg/g, with one standard uncertainty from counting. Off: from the phase mean, in standard deviations of a spot."), make("thead", {}, make("tr", {}, heads.map((name, place) => make("th", { scope: "col", class: place && place < 5 ? "num" : null }, name)))), make("tbody", {}, rows)));
}

const signed = (value) => {
  const shown = Math.abs(value).toFixed(1);
  return shown === "0.0" ? shown : `${value > 0 ? "+" : "−"}${shown}`;
};

function rulingForm(spot) {
  const reference = text(SPOTS.material, spot) !== null;
  const analytes = DATA.analytes.filter((analyte) => measured(analyte, spot)).map((analyte) => analyte.name);
  const field = (name, input) => make("label", {}, `${name} `, input);
  const what = make("select", { id: "rule-analyte" }, make("option", { value: "*" }, "the whole spot"), analytes.map((name) => make("option", { value: name }, name)));
  const reason = make("input", { id: "rule-reason", type: "text", required: true, autocomplete: "off" });
  const analyst = make("input", { id: "rule-analyst", type: "text", required: true, value: rulingForm.analyst || "", autocomplete: "off" });
  const day = make("input", { id: "rule-date", type: "date", required: true, value: today() });
  const verdicts = ["drop", "keep"].map((name) => make("label", { class: "choice" }, make("input", { type: "radio", name: "rule-verdict", value: name, required: true, checked: name === (reference || SPOTS.used[spot] ? "drop" : "keep") }), ` ${name}`));
  const form = make("form", { id: "rule" }, make("fieldset", {}, make("legend", {}, "Your ruling"), reference ? make("p", { class: "note" }, "A reference material never enters a phase mean; drop takes it out of the calibration.") : null, make("div", { class: "row" }, verdicts), field("on", what), field("reason", reason), field("analyst", analyst), field("date", day), make("button", { type: "submit" }, "Record"), make("p", { class: "note", role: "status", id: "rule-status" }, ruledText(spot))));
  form.addEventListener("submit", (event) => {
    event.preventDefault();
    const texts = [reason, analyst].map((input) => input.value.replace(/\s+/g, " ").trim());
    const empty = [reason, analyst].find((_, place) => !texts[place]);
    if (empty) { empty.focus(); return; }
    rulingForm.analyst = texts[1];
    record({ spot: spotName(spot), table: labelCount.get(spotName(spot)) > 1 ? text(SPOTS.table, spot) : null, analyte: what.value, verdict: form.querySelector("input[name=rule-verdict]:checked").value, reason: texts[0], analyst: texts[1], date: day.value, filed: false });
    document.getElementById("rule-status").textContent = `${ruledText(spot)} Save rulings.csv below when you are done.`;
  });
  return form;
}
function today() {
  const now = new Date(), two = (value) => String(value).padStart(2, "0");
  return `${now.getFullYear()}-${two(now.getMonth() + 1)}-${two(now.getDate())}`;
}
const aboutSpot = (one, spot) => one.spot === spotName(spot) && (one.table === null || one.table === text(SPOTS.table, spot));
function ruledText(spot) {
  const own = RULED.filter((one) => aboutSpot(one, spot));
  return own.map((one) => `${one.filed ? "On file" : "Recorded"}: ${one.verdict} ${one.analyte === "*" ? "the whole spot" : one.analyte} (${one.analyst}, ${one.date}): ${one.reason}.`).join(" ");
}

/** A ruling takes the place of an earlier one on the same spot and analyte: the file may not contradict itself. */
function record(ruling) {
  const same = RULED.findIndex((one) => one.spot === ruling.spot && one.analyte === ruling.analyte && (one.table === null || ruling.table === null || one.table === ruling.table));
  if (same >= 0) RULED.splice(same, 1);
  RULED.push(ruling);
  unsaved = true;
  showRulings();
}
function showRulings() {
  const body = document.querySelector("#rulings tbody");
  body.replaceChildren(...RULED.map((one) => make("tr", { class: one.filed ? null : "is-new" }, [one.spot, one.analyte === "*" ? "all" : one.analyte, one.verdict, one.analyst, one.date, one.reason, one.filed ? "on file" : "new"].map((cell) => make("td", {}, cell)),
    make("td", {}, make("button", { type: "button", "aria-label": `Remove the ruling on ${one.spot}`, onclick: () => { RULED.splice(RULED.indexOf(one), 1); unsaved = true; showRulings(); } }, "remove")))));
  const fresh = RULED.filter((one) => !one.filed).length;
  document.getElementById("rulings-count").textContent = `${many(RULED.length, "ruling")}, ${fresh} new`;
  document.querySelectorAll(".mark").forEach((mark) => mark.classList.toggle("ruled", mark.dataset.spot !== undefined && RULED.some((one) => !one.filed && aboutSpot(one, Number(mark.dataset.spot)))));
}
/** The file as `run` reads it: labels exactly as they are in the tables. */
function rulingsCsv() {
  const withTable = RULED.some((one) => one.table !== null);
  const names = ["spot", "analyte", "verdict", "analyst", "date", "reason", ...(withTable ? ["table"] : [])];
  return [names, ...RULED.map((one) => names.map((name) => one[name]))].map((line) => line.map((cell) => csvCell(cell, true)).join(",")).join("\n") + "\n";
}
function saveRulings() {
  const link = make("a", { href: URL.createObjectURL(new Blob([rulingsCsv()], { type: "text/csv" })), download: "rulings.csv" });
  document.body.append(link);
  link.click();
  link.remove();
  unsaved = false;
}
