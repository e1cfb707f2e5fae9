// The table of D: sorting, filtering, copying; and the uncertainty budget beside it.

// A class that the configuration names has no letter of its own.
const MARKS = { compatible: "c", incompatible: "i", "highly incompatible": "h", unresolved: "?" };
const markOfClass = (name) => MARKS[name] || "+";
const STYLES = { c: "class-c", i: "class-i", h: "class-h", "?": "class-open", "+": "class-extra" };
const SHARES = ["share_counting", "share_spread", "share_calibration", "share_internal_standard"];
const SHARE_NAMES = ["counting", "spread between spots", "calibration", "internal standard"];

/** What a D is sorted by: its value, or its limit. */
const levelOf = (at) => DATA.D.D[at] ?? (D.kind[at] === "lower-limit" ? DATA.D.D_lo[at] : DATA.D.D_hi[at]);
const COLUMNS = [
  { title: "Experiment", by: (at) => D.experiment[at] },
  { title: "Pair", by: (at) => D.pair[at] },
  { title: "Element", by: (at) => DATA.atomicNumber[D.element[at]] || 999 },
  { title: "D", by: levelOf, number: true },
  { title: `${percent(DATA.confidence)} interval`, by: (at) => DATA.D.D_lo[at], number: true },
  { title: "Class", by: (at) => D.class[at] },
  { title: "n, alpha and beta", by: (at) => DATA.D.n_alpha[at], number: true },
  { title: "Uncertainty from", by: (at) => DATA.D.share_counting[at] ?? 2 },
  { title: "Remark", by: (at) => remarkOf(at) },
];
const shown = { sort: null, down: false, filters: { experiment: "", pair: "", element: "", class: "" } };

function remarkOf(at) {
  const remarks = D.reason[at] ? [D.reason[at]] : [];
  if (D.kind[at] === "value" && DATA.D.D_overlap_lo[at] === 0 && DATA.D.D_lo[at] > 0) remarks.push(`could be leftover ${D.beta[at]} alone`);
  return remarks.join("; ");
}

function rowOf(at) {
  const { D_lo, D_hi, n_alpha, n_beta, written } = DATA.D;
  const interval = D.kind[at] === "value" ? `${number(D_lo[at], 3)} to ${number(D_hi[at], 3)}` : "";
  const open = make("button", { type: "button", class: "link", onclick: () => choose({ pair: D.pair[at], element: D.element[at], experiment: D.experiment[at] }), title: "Show this element, pair and experiment in the pictures" }, D.element[at]);
  return make("tr", { "data-at": at },
    make("td", {}, D.experiment[at]), make("td", {}, D.pair[at]), make("td", {}, open), make("td", { class: "num" }, written[at]), make("td", { class: "num" }, interval),
    make("td", {}, make("span", { class: `class ${STYLES[markOfClass(D.class[at])]}` }, make("b", { "aria-hidden": "true" }, markOfClass(D.class[at])), ` ${D.class[at]}`)),
    make("td", { class: "num" }, `${n_alpha[at]}, ${n_beta[at]}`), make("td", {}, budgetBar(at)), make("td", { class: "remark" }, remarkOf(at)));
}

function budgetBar(at) {
  const parts = SHARES.map((name) => DATA.D[name][at]);
  if (!parts.some(known)) return make("span", { class: "note" }, "–");
  const words = parts.map((share, place) => `${SHARE_NAMES[place]} ${percent(share || 0)}`).join(", ");
  return make("span", { class: "budget", role: "img", "aria-label": words, title: words }, parts.map((share, place) => make("i", { class: `share${place}`, style: `width:${(100 * (share || 0)).toFixed(1)}%` })));
}

const fits = (at) => Object.entries(shown.filters).every(([name, wanted]) => !wanted || D[name][at] === wanted);
function visibleRows() {
  const rows = rowsOf(fits);
  if (shown.sort === null) return rows;
  const by = COLUMNS[shown.sort].by, sign = shown.down ? -1 : 1;
  const order = (a, b) => {
    const one = by(a), two = by(b);
    if (one === null || two === null) return (one === null) - (two === null);
    return sign * (typeof one === "number" ? one - two : String(one).localeCompare(String(two), "en"));
  };
  return rows.sort((a, b) => order(a, b) || a - b);
}

const tableRows = new Map();
function showTable() {
  const rows = visibleRows(), body = document.querySelector("#d-table tbody");
  for (const at of rows) if (!tableRows.has(at)) tableRows.set(at, rowOf(at));
  body.replaceChildren(...rows.map((at) => tableRows.get(at)));
  document.getElementById("d-count").textContent = `${rows.length} of ${D.size} D`;
  document.querySelectorAll("#d-table th").forEach((head, place) => head.setAttribute("aria-sort", place !== shown.sort ? "none" : shown.down ? "descending" : "ascending"));
}

function buildTable() {
  const head = COLUMNS.map((column, place) => make("th", { scope: "col", class: column.number ? "num" : null, "aria-sort": "none" }, make("button", { type: "button", onclick: () => {
    shown.down = shown.sort === place && !shown.down;
    shown.sort = place;
    showTable();
  } }, column.title)));
  document.querySelector("#d-table thead").append(make("tr", {}, head));
  const lists = { experiment: unique(D.experiment), pair: PAIRS, element: ELEMENTS, class: unique([...Object.keys(MARKS), ...D.class]).filter((name) => D.class.includes(name)) };
  for (const [name, values] of Object.entries(lists)) {
    const select = make("select", { id: `filter-${name}`, onchange: () => { shown.filters[name] = select.value; showTable(); } }, make("option", { value: "" }, "all"), values.map((value) => make("option", { value }, value)));
    document.getElementById("d-filters").append(make("label", {}, `${name} `, select));
  }
  document.getElementById("d-copy").addEventListener("click", () => copyText(tableAsCsv(), document.getElementById("d-copied")));
  showTable();
}

/** A cell of CSV that no spreadsheet program takes for a formula. */
function csvCell(value, exact = false) {
  if (value === null || value === undefined) return "";
  if (typeof value === "number") return String(value);
  const safe = !exact && /^[ \n]*[=+\-@\t\r]/.test(value) ? `'${value}` : value;
  return /[",\n\r]/.test(safe) ? `"${safe.replaceAll('"', '""')}"` : safe;
}
function tableAsCsv() {
  const names = ["experiment", "alpha", "beta", "element", "written", "D", "D_sd", "D_lo", "D_hi", "kind", "class", "n_alpha", "n_beta", "confidence"];
  const lines = visibleRows().map((at) => [D.experiment[at], D.alpha[at], D.beta[at], D.element[at], DATA.D.written[at], DATA.D.D[at], DATA.D.D_sd[at], DATA.D.D_lo[at], DATA.D.D_hi[at], D.kind[at], D.class[at], DATA.D.n_alpha[at], DATA.D.n_beta[at], DATA.confidence]);
  return [names, ...lines].map((line) => line.map((cell) => csvCell(cell)).join(",")).join("\n") + "\n";
}
async function copyText(content, status) {
  try {
    await navigator.clipboard.writeText(content);
  } catch {
    const area = make("textarea", { class: "offscreen" }, content);
    document.body.append(area);
    area.select();
    document.execCommand("copy");
    area.remove();
  }
  status.textContent = "copied";
  setTimeout(() => (status.textContent = ""), 2500);
}

/** The budget of every element of one experiment, or of one element in every experiment. */
function showBudget(holder) {
  const rows = rowsOf((at) => D.pair[at] === chosen.pair && (chosen.experiment ? D.experiment[at] === chosen.experiment : D.element[at] === chosen.element) && known(DATA.D.share_counting[at]));
  rows.sort((a, b) => levelOf(b) - levelOf(a));
  const title = chosen.experiment ? `${chosen.pair}, ${chosen.experiment}, every element` : `${chosen.element}, ${chosen.pair}, every experiment`;
  const legend = make("ul", { class: "legend" }, SHARE_NAMES.map((name, place) => make("li", {}, make("i", { class: `swatch share${place}` }), name)));
  const lines = rows.map((at) => make("li", {}, make("span", { class: "budget-name" }, chosen.experiment ? D.element[at] : D.experiment[at]), budgetBar(at), make("span", { class: "num" }, `${percent(DATA.D.D_sd[at] / Math.abs(DATA.D.D[at]))}`)));
  holder.replaceChildren(make("p", {}, `${title}. At the right the relative standard uncertainty of D.`), legend, lines.length ? make("ul", { class: "budgets" }, lines) : make("p", { class: "note" }, "No budget for this choice: limits from the likelihood are not split into parts."));
}
