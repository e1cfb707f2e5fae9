// The pictures: each takes the data and what is chosen, and says what to draw.

const PICTURES = {};
const experimentsShown = () => (chosen.experiment ? [chosen.experiment] : EXPERIMENTS);
const axis = (title, values, log) => ({ title, log, ...rangeOf(values, log) });
const classWord = (at) => (D.class[at] === "unresolved" ? "class open" : D.class[at]);

/** What one D says of itself. */
function describeD(at) {
  const { D_lo: lo, D_hi: hi, written } = DATA.D;
  const interval = D.kind[at] === "value" ? `, ${percent(DATA.confidence)} interval ${number(lo[at])} to ${number(hi[at])}` : "";
  return `${D.element[at]} ${D.experiment[at]} ${D.pair[at]}: D ${written[at]}${interval}; ${classWord(at)}; n ${DATA.D.n_alpha[at]} and ${DATA.D.n_beta[at]}`;
}
/** The mark of one D at x; none where nothing is known of it, or it is not positive on the logarithmic axis. */
function markOfD(at, x, style) {
  const kind = D.kind[at], limit = kind === "upper-limit" ? "upper" : kind === "lower-limit" ? "lower" : null;
  const y = limit === "upper" ? DATA.D.D_hi[at] : limit === "lower" ? DATA.D.D_lo[at] : DATA.D.D[at];
  if (!known(y) || y <= 0) return null;
  const bars = limit ? {} : { lo: DATA.D.D_lo[at], hi: DATA.D.D_hi[at] };
  return { x, y, ...bars, limit, ...style, label: describeD(at), go: { element: D.element[at], experiment: D.experiment[at] } };
}
const chargeWord = (charge) => `${charge}+`;
const hiddenNote = (names, why) => (names.length ? ` Not drawn, ${why}: ${unique(names).join(", ")}.` : "");

PICTURES.radius = () => {
  const [alpha] = phasesOf(chosen.pair), radii = DATA.radii[alpha] || { of: {} }, marks = [], missing = [], charges = new Set();
  const rows = rowsOf((at) => D.pair[at] === chosen.pair && (!chosen.experiment || D.experiment[at] === chosen.experiment));
  for (const at of rows) {
    const radius = radii.of[D.element[at]];
    if (!radius) { missing.push(D.element[at]); continue; }
    const mark = markOfD(at, radius[1], styleOf(radius[0] - 1));
    if (!mark) { missing.push(D.element[at]); continue; }
    charges.add(radius[0]);
    marks.push({ ...mark, label: `${mark.label}; radius ${radius[1]} Å, charge ${chargeWord(radius[0])}` });
  }
  const lines = [], bounds = unique(rows.map((at) => `${D.experiment[at]}|${DATA.D.overlap_bound[at]}`)).map((one) => one.split("|"));
  const curves = DATA.curves.filter((one) => `${one.alpha}/${one.beta}` === chosen.pair && (!chosen.experiment || one.experiment === chosen.experiment));
  for (const one of curves) {
    lines.push({ points: one.radius.map((r, i) => [r, one.D[i]]), class: "fit", label: `${one.label} ${one.experiment}`, quiet: !chosen.experiment });
    if (chosen.experiment) for (const edge of [one.D_lo, one.D_hi]) if (edge.length) lines.push({ points: one.radius.map((r, i) => [r, edge[i]]), class: "fit edge", label: "" });
  }
  const xs = axis("ionic radius, Å", marks.map((mark) => mark.x));
  const good = bounds.filter(([, f]) => f !== "null" && Number(f) > 0);
  if (chosen.experiment) for (const [, f] of good) lines.push({ points: [[xs.lo, Number(f)], [xs.hi, Number(f)]], class: "bound", label: `room for ${percent(Number(f))} ${phasesOf(chosen.pair)[1]}` });
  const ys = axis(`D ${chosen.pair}`, [...marks.flatMap((m) => [m.y, m.lo, m.hi]), ...curves.flatMap((c) => c.D)], true);
  return {
    label: `D against ionic radius, ${chosen.pair}${chosen.experiment ? ", " + chosen.experiment : ""}`, height: 400, x: xs, y: ys, marks, lines,
    legend: [
      ...[...charges].sort().map((charge) => ({ ...styleOf(charge - 1), label: `charge ${chargeWord(charge)}` })),
      { colour: "k7", limit: true, label: "upper limit" },
      ...(curves.length ? [{ line: "fit", label: "fitted curve" }] : []),
      ...(chosen.experiment && good.length ? [{ line: "bound", label: "D that leftover overlap alone could make" }] : []),
    ],
    note: `Radii of Shannon (1976) for coordination ${radii.coordination}; bars are ${percent(DATA.confidence)} intervals.` + (chosen.experiment ? "" : " Choose one experiment to see the level that leftover overlap could make.") + hiddenNote(missing, "no radius or no positive value"),
  };
};

PICTURES.elements = () => {
  const rows = rowsOf((at) => D.pair[at] === chosen.pair);
  const middle = (element) => {
    const own = rows.filter((at) => D.element[at] === element).map((at) => DATA.D.D[at] ?? DATA.D.D_hi[at]).filter(known).sort((a, b) => a - b);
    return own.length ? own[own.length >> 1] : Infinity;
  };
  const names = ELEMENTS.filter((element) => rows.some((at) => D.element[at] === element)).map((element) => [middle(element), element]).sort((a, b) => a[0] - b[0]).map(([, element]) => element);
  const experiments = EXPERIMENTS.filter((name) => rows.some((at) => D.experiment[at] === name));
  const marks = [], place = new Map(names.map((name, at) => [name, at]));
  const spread = (name) => (experiments.length > 1 ? (experiments.indexOf(name) / (experiments.length - 1) - 0.5) * 8 : 0);
  for (const at of rows) {
    const mark = markOfD(at, place.get(D.element[at]), styleOf(EXPERIMENTS.indexOf(D.experiment[at])));
    if (mark) marks.push({ ...mark, shift: spread(D.experiment[at]), size: 3.4, faint: chosen.experiment && D.experiment[at] !== chosen.experiment });
  }
  return {
    label: `D element by element, ${chosen.pair}`, height: 400, marks,
    x: { title: "element, by increasing D", categories: names },
    y: axis(`D ${chosen.pair}`, marks.flatMap((mark) => [mark.y, mark.lo, mark.hi]), true),
    bands: [{ y0: DATA.highlyBelow, y1: DATA.compatibleAbove, class: "between", label: "between the class boundaries" }],
    legend: [...experiments.map((name) => ({ ...styleOf(EXPERIMENTS.indexOf(name)), label: name })), { colour: "k7", limit: true, label: "upper limit" }, { band: "between", label: `${DATA.highlyBelow} < D < ${DATA.compatibleAbove}` }],
  };
};

/** Marks of all spots of a phase for one element; x from the spot. */
function spotMarks(phase, element, xOf, style) {
  const marks = [];
  for (const analyte of analytesOf(element)) {
    const { start, size, name } = DATA.techniques[analyte.technique];
    for (let spot = start; spot < start + size; spot++) {
      if (spotPhase[spot] !== phase || (chosen.experiment && spotExperiment[spot] !== chosen.experiment)) continue;
      const cell = measured(analyte, spot), x = xOf(spot, cell, analyte);
      if (!cell || x === null) continue;
      const only = cell.value === null, y = only ? cell.limit : cell.value;
      const bars = !only && known(cell.sigma) ? { lo: y - cell.sigma, hi: y + cell.sigma } : {};
      marks.push({
        x, y, ...bars, spot, limit: only ? "upper" : null, out: !cell.used, ...style(analyte, spot),
        label: `${SPOTS.spot[spot]}: ${analyte.name} ${only ? "<" + number(cell.limit, 3) : number(y)}${known(cell.sigma) ? " ± " + number(cell.sigma, 2) : ""} ppm by ${name}${cell.used ? "" : "; left out: " + cell.why}`,
      });
    }
  }
  return marks;
}
const isWide = (marks) => {
  const good = marks.map((mark) => mark.y).filter((y) => y > 0);
  return good.length > 2 && good.every((y) => y > 0) && Math.max(...good) > 30 * Math.min(...good) && !marks.some((mark) => mark.y <= 0);
};
const techniqueStyle = (analyte) => styleOf(analyte.technique);
const OUT = { colour: "k7", shape: "circle", out: true, label: "left out" };
const techniqueLegend = (element) => unique(analytesOf(element).map((one) => one.technique)).map((at) => ({ ...styleOf(at), label: `used, ${DATA.techniques[at].name}` }));

function strip(phase) {
  const names = experimentsShown().filter((name) => spotExperiment.some((one, spot) => one === name && spotPhase[spot] === phase));
  const analytes = analytesOf(chosen.element);
  const width = 1 / (analytes.length + 0.6), seen = new Map();
  const marks = spotMarks(phase, chosen.element, (spot, cell, analyte) => {
    const key = `${spotExperiment[spot]}|${analytes.indexOf(analyte)}`, count = (seen.get(key) || 0) + 1;
    seen.set(key, count);
    return names.indexOf(spotExperiment[spot]) - 0.5 + width * (0.3 + analytes.indexOf(analyte)) + width * Math.min(0.95, 0.08 + count * 0.11);
  }, techniqueStyle);
  const means = DATA.means, bands = [], lines = [];
  for (let at = 0; at < means.mean_ppm.length; at++) {
    const place = names.indexOf(text(means.experiment, at));
    if (place < 0 || text(means.phase, at) !== phase || text(means.element, at) !== chosen.element || !known(means.mean_ppm[at])) continue;
    const which = analytes.findIndex((one) => one.name === text(means.analyte, at) && DATA.techniques[one.technique].name === text(means.technique, at));
    const left = place - 0.5 + width * (0.3 + which), right = left + width, mean = means.mean_ppm[at], spread = means.spread_sd_ppm[at];
    if (known(spread) && spread > 0) bands.push({ x0: left, x1: right, y0: mean - spread, y1: mean + spread, class: "spread", label: `spread between spots ${number(spread, 2)} ppm` });
    lines.push({ points: [[left, mean], [right, mean]], class: "mean", quiet: true, label: `mean ${number(mean)} ± ${number(means.se_ppm[at], 2)} ppm (one standard error), n ${means.n_used[at]}, mswd ${number(means.mswd[at], 3)}` });
  }
  const log = isWide(marks);
  return {
    label: `${chosen.element} in ${phase}, spot by spot`, height: 300, marks, bands, lines, x: { title: "experiment", categories: names },
    y: axis(`${chosen.element} in ${phase}, ppm`, marks.flatMap((mark) => [mark.y, mark.lo, mark.hi]), log),
    legend: [...techniqueLegend(chosen.element), OUT, { line: "mean", label: "phase mean" }, { band: "spread", label: "spread between spots beyond counting, ± one sd" }],
    note: marks.length ? "Bars are one standard uncertainty from counting." : `No ${chosen.element} in ${phase}.`,
  };
}
PICTURES.stripAlpha = () => strip(phasesOf(chosen.pair)[0]);
PICTURES.stripBeta = () => strip(phasesOf(chosen.pair)[1]);

/** Elements that a crystal hardly takes: overlap shows in them first. */
function tracersOf(pair) {
  const size = new Map();
  rowsOf((at) => D.pair[at] === pair).forEach((at) => {
    const D_at = DATA.D.D[at] ?? DATA.D.D_hi[at];
    if (known(D_at)) size.set(D.element[at], [...(size.get(D.element[at]) || []), D_at]);
  });
  const middle = [...size].map(([element, list]) => [list.sort((a, b) => a - b)[list.length >> 1], element]).sort((a, b) => a[0] - b[0]);
  return middle.filter(([level]) => level < 0.3).map(([, element]) => element);
}
PICTURES.tracer = () => {
  const [alpha, beta] = phasesOf(chosen.pair), techniques = unique(analytesOf(chosen.element).map((one) => one.technique));
  const shared = analytesOf(chosen.tracer).filter((one) => techniques.includes(one.technique));
  const xs = new Map();
  for (const one of shared) for (let spot = DATA.techniques[one.technique].start; spot < DATA.techniques[one.technique].start + DATA.techniques[one.technique].size; spot++) {
    const cell = measured(one, spot);
    if (cell && !xs.has(`${one.technique}|${spot}`)) xs.set(`${one.technique}|${spot}`, cell);
  }
  const marks = spotMarks(alpha, chosen.element, (spot, cell, analyte) => {
    const other = xs.get(`${analyte.technique}|${spot}`);
    return other ? other.value ?? other.limit : null;
  }, (analyte, spot) => styleOf(EXPERIMENTS.indexOf(spotExperiment[spot])));
  for (const mark of marks) mark.label += `; ${chosen.tracer} ${number(mark.x)} ppm`;
  const lines = chosen.experiment ? mixingLines(alpha, beta, marks, techniques) : [];
  const names = unique(marks.map((mark) => spotExperiment[mark.spot])).sort();
  return {
    label: `${chosen.element} against ${chosen.tracer} in ${alpha}`, height: 340, marks, lines,
    x: axis(`${chosen.tracer} in ${alpha}, ppm`, marks.map((mark) => mark.x)), y: axis(`${chosen.element} in ${alpha}, ppm`, marks.flatMap((mark) => [mark.y, mark.lo, mark.hi])),
    legend: [...names.map((name) => ({ ...styleOf(EXPERIMENTS.indexOf(name)), label: name })), OUT, ...(lines.length ? [{ line: "bound", label: `line from the crystal towards the ${beta}` }] : [])],
    note: `Spots that hold some ${beta} lie along a line towards it.` + (chosen.experiment ? "" : " Choose one experiment to see that line.") + " An arrow or a point at its limit is an upper limit.",
  };
};
/** From the mean of the used crystal spots towards the melt, with ticks at round admixed fractions. */
function mixingLines(alpha, beta, marks, techniques) {
  const lines = [];
  const mean = (phase, element, technique) => {
    const at = DATA.means.mean_ppm.findIndex((value, row) => known(value) && text(DATA.means.experiment, row) === chosen.experiment && text(DATA.means.phase, row) === phase && text(DATA.means.element, row) === element && text(DATA.means.technique, row) === DATA.techniques[technique].name);
    return at < 0 ? null : DATA.means.mean_ppm[at];
  };
  for (const technique of techniques) {
    const x1 = mean(beta, chosen.tracer, technique), y1 = mean(beta, chosen.element, technique);
    const used = marks.filter((mark) => !mark.out && analytesOf(chosen.element).some((one) => one.technique === technique && measured(one, mark.spot)));
    if (x1 === null || y1 === null || !used.length) continue;
    const x0 = mean(alpha, chosen.tracer, technique) ?? Math.min(...used.map((mark) => mark.x)), y0 = mean(alpha, chosen.element, technique) ?? Math.min(...used.map((mark) => mark.y));
    const reach = Math.max(...marks.map((mark) => mark.x)), end = Math.min(1, Math.max(1e-4, (reach - x0) / (x1 - x0)));
    const at = (f) => [x0 + f * (x1 - x0), y0 + f * (y1 - y0)];
    const ticks = [0.0001, 0.0002, 0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5].filter((f) => f <= end && f > end / 12).map((f) => [...at(f), percent(f)]);
    lines.push({ points: [at(0), at(end)], class: "bound", ticks, label: "", quiet: true });
  }
  return lines;
}

PICTURES.distance = () => {
  const [alpha] = phasesOf(chosen.pair);
  const marks = spotMarks(alpha, chosen.element, (spot) => SPOTS.distance[spot], (analyte, spot) => styleOf(EXPERIMENTS.indexOf(spotExperiment[spot])));
  for (const mark of marks) mark.label += `; ${number(mark.x)} µm${text(SPOTS.grain, mark.spot) === null ? "" : ", grain " + text(SPOTS.grain, mark.spot)}`;
  const names = unique(marks.map((mark) => spotExperiment[mark.spot])).sort();
  return {
    label: `${chosen.element} in ${alpha} against distance`, height: 320, marks, x: axis("distance, µm", marks.map((mark) => mark.x)),
    y: axis(`${chosen.element} in ${alpha}, ppm`, marks.flatMap((mark) => [mark.y, mark.lo, mark.hi]), isWide(marks)),
    legend: [...names.map((name) => ({ ...styleOf(EXPERIMENTS.indexOf(name)), label: name })), OUT], note: marks.length ? "" : `No distances for ${alpha}.`,
  };
};

function sums(phase) {
  const { spot, total, total_sd, cations, cations_sd, windows } = DATA.sums, window = windows[phase] || {}, marks = [];
  spot.forEach((one, at) => {
    if (spotPhase[one] !== phase || (chosen.experiment && spotExperiment[one] !== chosen.experiment)) return;
    const y = window.cations ? cations[at] : SPOTS.sequence[one];
    if (!known(y) || !known(total[at])) return;
    const bar = window.cations && known(cations_sd[at]) ? { lo: y - cations_sd[at], hi: y + cations_sd[at] } : {};
    marks.push({
      x: total[at], y, ...bar, left: total[at] - (total_sd[at] || 0), right: total[at] + (total_sd[at] || 0), spot: one, out: SPOTS.used[one] === 0, ...styleOf(EXPERIMENTS.indexOf(spotExperiment[one])),
      label: `${SPOTS.spot[one]}: total ${number(total[at], 5)} ± ${number(total_sd[at], 2)} wt%${window.cations ? `, cation sum ${number(cations[at], 4)} per ${window.oxygens} O` : ""}${SPOTS.used[one] ? "" : "; left out"}`,
    });
  });
  const bands = [];
  if (window.total) bands.push({ x0: window.total[0], x1: window.total[1], class: "window", label: "accepted totals" });
  if (window.cations) bands.push({ y0: window.cations[0], y1: window.cations[1], class: "window", label: "accepted cation sums" });
  const names = unique(marks.map((mark) => spotExperiment[mark.spot])).sort();
  return {
    label: `oxide total ${window.cations ? "against cation sum" : "in run order"}, ${phase}`, height: 320, marks, bands,
    x: axis("oxide total, wt%", [...marks.map((mark) => mark.x), ...(marks.length ? window.total || [] : [])]),
    y: axis(window.cations ? `cations per ${window.oxygens} O` : "place in the run order", [...marks.map((mark) => mark.y), ...(marks.length ? window.cations || [] : [])]),
    legend: [...names.map((name) => ({ ...styleOf(EXPERIMENTS.indexOf(name)), label: name })), OUT, { band: "window", label: "expected range" }], note: marks.length ? "" : `No whole analyses of ${phase}.`,
  };
}
PICTURES.sumsAlpha = () => sums(phasesOf(chosen.pair)[0]);
PICTURES.sumsBeta = () => sums(phasesOf(chosen.pair)[1]);

PICTURES.bias = () => {
  const rows = DATA.materials, names = unique(texts(rows.element)), marks = [], series = unique(rows.ratio.map((_, at) => `${text(rows.material, at)}, ${text(rows.batch, at)}`));
  names.sort((a, b) => (DATA.atomicNumber[a] || 999) - (DATA.atomicNumber[b] || 999));
  rows.ratio.forEach((ratio, at) => {
    if (!known(ratio)) return;
    const which = series.indexOf(`${text(rows.material, at)}, ${text(rows.batch, at)}`);
    marks.push({
      x: names.indexOf(text(rows.element, at)), y: ratio, lo: ratio - rows.ratio_se[at], hi: ratio + rows.ratio_se[at], shift: (which - (series.length - 1) / 2) * 4, ...styleOf(which),
      label: `${text(rows.element, at)}, ${series[which]}: measured over accepted ${number(ratio)} ± ${number(rows.ratio_se[at], 2)}, n ${rows.n_spots[at]}`, go: { element: text(rows.element, at) },
    });
  });
  const limit = DATA.tolerance;
  return {
    label: "reference materials: measured over accepted", height: 320, marks, x: { title: "element", categories: names }, y: axis("measured / accepted", [...marks.flatMap((mark) => [mark.lo, mark.hi]), 1]),
    bands: [{ y0: 1 - limit, y1: 1 + limit, class: "window", label: `within ${percent(limit)}` }], legend: [...series.map((name, at) => ({ ...styleOf(at), label: name })), { band: "window", label: `the laboratory's limit, ${percent(limit)}` }],
    note: marks.length ? "Bars are one standard uncertainty, that of the accepted value included." : "No reference material with an accepted value.",
  };
};
PICTURES.runOrder = () => {
  const accepted = new Map(), rows = DATA.materials, marks = [];
  rows.ratio.forEach((_, at) => accepted.set(`${text(rows.batch, at)}|${text(rows.material, at)}|${text(rows.element, at)}`, rows.accepted_ppm[at]));
  const batches = unique(texts(rows.batch));
  for (const analyte of analytesOf(chosen.element)) {
    const { start, size } = DATA.techniques[analyte.technique];
    for (let spot = start; spot < start + size; spot++) {
      const batch = text(SPOTS.batch, spot), true_ppm = accepted.get(`${batch}|${text(SPOTS.material, spot)}|${chosen.element}`), cell = measured(analyte, spot);
      if (!known(true_ppm) || !cell || cell.value === null) continue;
      const ratio = cell.value / true_ppm, sd = (cell.sigma || 0) / true_ppm;
      marks.push({ x: SPOTS.sequence[spot], y: ratio, lo: ratio - sd, hi: ratio + sd, spot, ...styleOf(batches.indexOf(batch)), label: `${SPOTS.spot[spot]}, ${batch}, place ${SPOTS.sequence[spot]}: ${analyte.name} measured over accepted ${number(ratio)} ± ${number(sd, 2)}` });
    }
  }
  return {
    label: `reference materials in run order, ${chosen.element}`, height: 280, marks, x: axis("place in the run order", marks.map((mark) => mark.x)), y: axis(`${chosen.element} measured / accepted`, [...marks.flatMap((mark) => [mark.lo, mark.hi]), 1]),
    lines: [{ points: [[0, 1], [1e6, 1]].map(([x, y]) => [Math.min(x, Math.max(1, ...marks.map((mark) => mark.x))), y]), class: "mean", label: "", quiet: true }],
    legend: batches.map((name, at) => ({ ...styleOf(at), label: name })), note: marks.length ? "Bars are one standard uncertainty from counting." : `No reference material measured for ${chosen.element}.`,
  };
};

PICTURES.checks = () => {
  const rows = DATA.checks.filter((one) => known(one.value) && known(one.expected_lo) && known(one.expected_hi) && one.expected_hi > one.expected_lo);
  const short = { exchange: "K_D", "lattice-strain": "curve", "mass-balance": "balance" };
  const kinds = rows.map((one) => `${short[one.check] || one.check} ${one.alpha || one.subject.split(" ")[0]}`), names = unique(kinds), marks = [];
  // Each check on its own scale: 0 and 1 are the ends of what is expected.
  const share = (one, value) => (value - one.expected_lo) / (one.expected_hi - one.expected_lo);
  const spread = (name) => (EXPERIMENTS.length > 1 ? (EXPERIMENTS.indexOf(name) / (EXPERIMENTS.length - 1) - 0.5) * 40 : 0);
  rows.forEach((one, at) => marks.push({ x: names.indexOf(kinds[at]), shift: one.experiment ? spread(one.experiment) : 0, y: share(one, one.value), lo: known(one.sd) ? share(one, one.value - one.sd) : null, hi: known(one.sd) ? share(one, one.value + one.sd) : null, ...styleOf(one.verdict === "differs" ? 1 : 0), label: `${kinds[at]}${one.experiment ? " " + one.experiment : ""}, ${one.subject}: ${number(one.value)}${known(one.sd) ? " ± " + number(one.sd, 2) : ""}, expected ${number(one.expected_lo)} to ${number(one.expected_hi)}; ${one.verdict}. ${one.detail}` }));
  return {
    label: "evidence against what is expected", height: 320, marks, x: { title: "check", categories: names }, y: axis("place in the expected range", [...marks.flatMap((mark) => [mark.y, mark.lo, mark.hi]), 0, 1]),
    bands: [{ y0: 0, y1: 1, class: "window", label: "expected" }], legend: [{ ...styleOf(0), label: "consistent, or cannot tell" }, { ...styleOf(1), label: "differs" }, { band: "window", label: "expected range" }],
    note: "Experiments from left to right within each check. Checks whose expectation is a single value, such as no loss, stand in the list only.",
  };
};

PICTURES.trend = () => {
  const found = DATA.trends.find((one) => one.pair === chosen.pair && one.element === chosen.element && one.condition === chosen.condition);
  const name = chosen.condition === "10^4/T" ? "10⁴/T, 1/K" : chosen.condition, marks = [], lines = [];
  const label = `D of ${chosen.element} ${chosen.pair} against ${name}`;
  if (found) {
    found.x.forEach((x, at) => marks.push({ x, y: found.D[at], lo: found.lo[at], hi: found.hi[at], ...styleOf(EXPERIMENTS.indexOf(found.experiment[at])), faint: chosen.experiment && found.experiment[at] !== chosen.experiment, go: { experiment: found.experiment[at] }, label: `${found.experiment[at]}: D ${number(found.D[at])}, ${number(found.lo[at])} to ${number(found.hi[at])}, at ${number(x)}${found.sd[at] ? " ± " + number(found.sd[at], 2) : ""}` }));
    if (found.line.length) lines.push({ points: [[Math.min(...found.x), found.line[0]], [Math.max(...found.x), found.line[1]]], class: "fit", label: "fitted line" });
  }
  const left = found && found.left ? ` ${many(found.left, "experiment")} left out: their D is a limit or undetermined.` : "";
  return {
    label, height: 340, marks, lines, x: axis(name, marks.map((mark) => mark.x)), y: axis(`D ${chosen.element} ${chosen.pair}`, marks.flatMap((mark) => [mark.y, mark.lo, mark.hi]), true),
    legend: [...(found ? unique(found.experiment).map((one) => ({ ...styleOf(EXPERIMENTS.indexOf(one)), label: one })) : []), ...(lines.length ? [{ line: "fit", label: "fitted line" }] : [])],
    note: found ? `Bars are one standard uncertainty.${found.p !== null ? ` Scatter about the line at least as large by chance: p ${number(found.p, 2)}.` : ""}${left}` : "Not enough experiments have a D of this element.",
  };
};

PICTURES.exchange = () => {
  const rows = DATA.exchange.filter((one) => one.pair === chosen.pair), elements = unique(rows.map((one) => one.elements)), marks = [];
  const experiments = EXPERIMENTS.filter((name) => rows.some((one) => one.experiment === name));
  for (const one of rows) {
    marks.push({ x: experiments.indexOf(one.experiment), y: one.K_D, lo: one.ends[0], hi: one.ends[1], ...styleOf(elements.indexOf(one.elements)), faint: chosen.experiment && one.experiment !== chosen.experiment, go: { experiment: one.experiment }, label: `${one.experiment}: K_D(${one.elements}) ${number(one.K_D)}, ${number(one.ends[0])} to ${number(one.ends[1])}; ${one.verdict}` });
  }
  const windows = rows.filter((one) => known(one.window[0]));
  const bands = unique(windows.map((one) => one.window.join(" "))).map((text) => text.split(" ").map(Number)).map(([y0, y1]) => ({ y0, y1, class: "window", label: "expected" }));
  const heights = [...marks.flatMap((mark) => [mark.y, mark.lo, mark.hi]), ...bands.flatMap((band) => [band.y0, band.y1])];
  return {
    label: `exchange coefficients, ${chosen.pair}`, height: 300, marks, bands, x: { title: "experiment", categories: experiments },
    y: axis(`K_D ${chosen.pair}`, heights, Math.max(...heights) > 10 * Math.min(...heights.filter((y) => y > 0))),
    legend: [...elements.map((name, at) => ({ ...styleOf(at), label: name })), ...(bands.length ? [{ band: "window", label: "expected range" }] : [])],
    note: rows.length ? `Bars are ${percent(DATA.assessConfidence)} intervals.${windows.length ? "" : " No range is known for this pair."}` : "No exchange coefficient of this pair.",
  };
};

/** The mass balance of the chosen experiment or of all: one mark per element and experiment. */
function balanceMarks(rows, elements, of) {
  const experiments = EXPERIMENTS.filter((name) => rows.some((one) => one.experiment === name));
  const spread = (name) => (experiments.length > 1 ? (experiments.indexOf(name) / (experiments.length - 1) - 0.5) * 20 : 0);
  const marks = rows.map((one) => ({ x: elements.indexOf(one.element), shift: spread(one.experiment), ...of(one), ...styleOf(EXPERIMENTS.indexOf(one.experiment)), go: { experiment: one.experiment } }));
  return { marks, legend: experiments.map((name) => ({ ...styleOf(EXPERIMENTS.indexOf(name)), label: name })) };
}
const balanceRows = () => DATA.balance.filter((one) => !chosen.experiment || one.experiment === chosen.experiment);

PICTURES.balance = () => {
  const rows = balanceRows().filter((one) => known(one.sigmas)), elements = unique(rows.map((one) => one.element)).sort();
  const { marks, legend } = balanceMarks(rows, elements, (one) => ({ y: one.sigmas, label: `${one.experiment} ${one.element}: start less phases ${number(one.sigmas, 3)} standard deviations` }));
  return {
    label: "residuals of the mass balance", height: 300, marks, bands: [{ y0: -2, y1: 2, class: "window", label: "within 2" }], x: { title: "element", categories: elements },
    y: axis("start less phases, sd", [...marks.map((mark) => mark.y), -2.5, 2.5]), legend: [...legend, { band: "window", label: "within 2" }],
    note: "Above: the phases hold too little, one rich in the element may be missing.",
  };
};

PICTURES.losses = () => {
  const rows = balanceRows().filter((one) => known(one.loss[0])), elements = unique(rows.map((one) => one.element)).sort();
  const { marks, legend } = balanceMarks(rows, elements, (one) => ({ y: one.loss[0], lo: one.loss[1], hi: one.loss[2], label: `${one.experiment} ${one.element}: ${number(one.loss[0], 3)} % lost, ${number(one.loss[1], 3)} to ${number(one.loss[2], 3)} %` }));
  return {
    label: "losses", height: 300, marks, lines: marks.length ? [{ points: [[-0.5, 0], [elements.length - 0.5, 0]], class: "bound", label: "" }] : [], x: { title: "element kept out of the fit", categories: elements },
    y: axis("lost, % of the start", marks.flatMap((mark) => [mark.y, mark.lo, mark.hi, 0])), legend, note: `Bars are ${percent(DATA.assessConfidence)} intervals.`,
  };
};
