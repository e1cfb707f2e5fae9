"use strict";
// What every other script uses: the data, what is chosen, elements, numbers in words.

const DATA = JSON.parse(document.getElementById("data").textContent);

/** Row `at` of a column that is kept as codes into its texts; null where there is none. */
const text = (column, at) => (column.c[at] < 0 ? null : column.t[column.c[at]]);
/** All rows of such a column. */
const texts = (column) => column.c.map((code) => (code < 0 ? null : column.t[code]));

/** What the reader has chosen; pictures are drawn again when it changes. */
const chosen = { pair: "", experiment: "", element: "", tracer: "", condition: "", spot: null };
const whenChosen = [];
function choose(change) {
  Object.assign(chosen, change);
  for (const act of whenChosen) act(change);
}

/** An HTML element with attributes and children; texts become text, never markup. */
function make(name, attributes = {}, ...children) {
  return filled(document.createElement(name), attributes, children);
}
const SVG = "http://www.w3.org/2000/svg";
function draw(name, attributes = {}, ...children) {
  return filled(document.createElementNS(SVG, name), attributes, children);
}
function filled(element, attributes, children) {
  for (const [key, value] of Object.entries(attributes)) {
    if (key.startsWith("on")) element.addEventListener(key.slice(2), value);
    else if (value !== null && value !== undefined && value !== false) element.setAttribute(key, value === true ? "" : value);
  }
  for (const child of children.flat(Infinity)) if (child !== null && child !== undefined) element.append(child);
  return element;
}

/** A number to `digits` significant digits, without a power of ten where one can do without. */
function number(value, digits = 4) {
  if (value === null || value === undefined || !isFinite(value)) return "–";
  if (value === 0) return "0";
  const size = Math.abs(value);
  if (size >= 1e7 || size < 1e-5) return value.toExponential(digits - 1).replace("e+", "e");
  return String(Number(value.toPrecision(digits)));
}
const percent = (fraction) => `${number(100 * fraction, 3)} %`;
const many = (count, one, more) => `${count} ${count === 1 ? one : more || one + "s"}`;
const unique = (list) => [...new Set(list)];
const known = (value) => value !== null && value !== undefined && isFinite(value);

// Columns of the table of D that are needed as texts again and again.
const D = {
  size: DATA.D.D.length,
  experiment: texts(DATA.D.experiment),
  element: texts(DATA.D.element),
  alpha: texts(DATA.D.alpha),
  beta: texts(DATA.D.beta),
  kind: texts(DATA.D.kind),
  class: texts(DATA.D.class),
  reason: texts(DATA.D.reason),
};
D.pair = D.alpha.map((alpha, at) => `${alpha}/${D.beta[at]}`);
const PAIRS = unique(D.pair);
const phasesOf = (pair) => {
  const at = D.pair.indexOf(pair);
  return at < 0 ? ["", ""] : [D.alpha[at], D.beta[at]];
};
const rowsOf = (test) => [...Array(D.size).keys()].filter(test);

const SPOTS = DATA.spots;
const EXPERIMENTS = unique([...D.experiment, ...texts(SPOTS.experiment).filter((name) => name !== null)]).sort();
const ELEMENTS = unique(D.element).sort((a, b) => (DATA.atomicNumber[a] || 999) - (DATA.atomicNumber[b] || 999));
const spotPhase = texts(SPOTS.phase);
const spotExperiment = texts(SPOTS.experiment);

/** What one analyte measured on one spot, or null where it has no value and no limit. */
function measured(analyte, spot) {
  const at = spot - DATA.techniques[analyte.technique].start;
  if (at < 0 || at >= analyte.v.length || analyte.w[at] === null) return null;
  const value = analyte.v[at], limit = analyte.l[at];
  if (value === null && limit === null) return null;
  const why = DATA.whys[analyte.w[at] >> 1];
  return { value, sigma: analyte.s[at], limit, below: analyte.w[at] % 2 === 1, why, used: why === "" };
}
/** The analytes of an element, the one whose mean made the D's first. */
const analytesOf = (element) => DATA.analytes.filter((analyte) => analyte.element === element);

// Colour and shape go together, so that neither is needed to tell two things apart.
const SHAPES = ["circle", "square", "triangle", "diamond", "down", "bar", "plus", "star"];
// Eight shapes and seven colours: 56 pairs before the first repeats.
const styleOf = (place) => ({ shape: SHAPES[place % 8], colour: `k${place % 7}` });
