// One kind of picture: marks, lines and bands over two axes, usable by pointer, keyboard and screen reader.

const MARGIN = { left: 62, right: 14, top: 12, bottom: 46 };

/** Ticks of an axis: {at, label, minor}. */
function ticksOf(axis) {
  if (axis.categories) return axis.categories.map((label, at) => ({ at, label }));
  return axis.log ? logTicks(axis.lo, axis.hi) : evenTicks(axis.lo, axis.hi, axis.most || 6);
}
function logTicks(lo, hi) {
  const first = Math.floor(Math.log10(lo)), last = Math.ceil(Math.log10(hi)), ticks = [];
  const step = Math.max(1, Math.ceil((last - first) / 8));
  for (let power = first; power <= last; power++) {
    for (const factor of last - first > 5 ? [1] : [1, 2, 5]) {
      const at = factor * 10 ** power;
      if (at < lo * 0.999 || at > hi * 1.001) continue;
      const named = factor === 1 ? (power - first) % step === 0 : last - first <= 2;
      ticks.push({ at, label: named ? power10(factor, power) : "", minor: factor !== 1 });
    }
  }
  return ticks;
}
const power10 = (factor, power) => (power >= -4 && power <= 5 ? number(factor * 10 ** power, 2) : `${factor === 1 ? "" : factor + "×"}10${raised(power)}`);
const raised = (power) => String(power).replace(/[-0-9]/g, (c) => (c === "-" ? "⁻" : "⁰¹²³⁴⁵⁶⁷⁸⁹"[c]));
function evenTicks(lo, hi, most) {
  const raw = (hi - lo) / most || 1, size = 10 ** Math.floor(Math.log10(raw));
  const step = [1, 2, 2.5, 5, 10].map((factor) => factor * size).find((candidate) => candidate >= raw);
  const ticks = [];
  for (let at = Math.ceil(lo / step - 1e-9); at * step <= hi + 1e-9 * step; at++) ticks.push({ at: at * step, label: number(at * step, 5) });
  return ticks;
}

/** Ends of an axis over all values given, with some room; both positive for a logarithmic one. */
function rangeOf(values, log, room = 0.06) {
  const good = values.filter((value) => known(value) && (!log || value > 0));
  if (!good.length) return log ? { lo: 0.1, hi: 10 } : { lo: 0, hi: 1 };
  let lo = good.reduce((a, b) => Math.min(a, b)), hi = good.reduce((a, b) => Math.max(a, b));
  if (log) {
    const extra = Math.max((Math.log10(hi) - Math.log10(lo)) * room, 0.08);
    return { lo: 10 ** (Math.log10(lo) - extra), hi: 10 ** (Math.log10(hi) + extra) };
  }
  const extra = (hi - lo) * room || Math.abs(hi) * 0.1 || 1;
  return { lo: lo - extra, hi: hi + extra };
}

/** A function from a value of the axis to a place between `from` and `to`; outside values are held at the ends. */
function scaleOf(axis, from, to) {
  if (axis.categories) return (value) => from + ((value + 0.5) / axis.categories.length) * (to - from);
  const bend = axis.log ? Math.log10 : (value) => value;
  const lo = bend(axis.lo), hi = bend(axis.hi);
  return (value) => {
    const share = axis.log && value <= 0 ? 0 : (bend(value) - lo) / (hi - lo);
    return from + Math.min(1.02, Math.max(-0.02, share)) * (to - from);
  };
}

/**
 * Draws a picture into `holder`. spec: {label, height, x, y, bands, lines, marks, legend, note}.
 * axis: {title, log, lo, hi} or {title, categories}. mark: {x, y, lo, hi, wide, limit, shape, colour, faint, out, spot,
 * label, go}; `lo`..`hi` is the outer bar, `wide` a second one; `limit` draws an arrow; `spot` links it to its spot.
 */
function plot(holder, spec) {
  const width = Math.max(280, holder.clientWidth || 640), height = spec.height || 330;
  const x = scaleOf(spec.x, MARGIN.left, width - MARGIN.right);
  const y = scaleOf(spec.y, height - MARGIN.bottom, MARGIN.top);
  const image = draw("svg", {
    viewBox: `0 0 ${width} ${height}`, width, height, tabindex: spec.marks.length ? 0 : null, role: "group",
    "aria-label": `${spec.label}. ${many(spec.marks.length, "point")}. Arrow keys go from point to point, Enter opens one.`,
    "aria-roledescription": "picture",
  });
  image.append(grid(spec, x, y, width, height));
  for (const band of spec.bands || []) image.append(bandOf(band, x, y, width, height));
  for (const line of spec.lines || []) image.append(lineOf(line, x, y, width));
  const layer = draw("g");
  for (const mark of spec.marks) layer.append(markOf(mark, x, y, height));
  image.append(layer);
  const readout = make("p", { class: "readout", "aria-live": "polite" }, spec.marks.length ? spec.hint || "Point at a mark, or use the arrow keys." : "");
  holder.replaceChildren(image, legendOf(spec.legend || []), readout, ...(spec.note ? [make("p", { class: "note" }, spec.note)] : []), tableOf(spec));
  listen(image, layer, spec.marks, readout);
}

function grid(spec, x, y, width, height) {
  const group = draw("g", { class: "grid", "aria-hidden": "true" });
  const bottom = height - MARGIN.bottom, right = width - MARGIN.right;
  for (const tick of ticksOf(spec.y)) {
    if (!tick.minor) group.append(draw("line", { x1: MARGIN.left, x2: right, y1: y(tick.at), y2: y(tick.at) }));
    if (tick.label !== "") group.append(draw("text", { x: MARGIN.left - 7, y: y(tick.at) + 4, "text-anchor": "end" }, tick.label));
  }
  const ticks = ticksOf(spec.x), tight = spec.x.categories && ticks.some((tick) => tick.label.length * 7 + 3 > (right - MARGIN.left) / ticks.length);
  // Long labels are turned, short ones take two rows; where even that is too tight, some are left out.
  const turned = tight && ticks.some((tick) => tick.label.length > 2), rows = tight && !turned ? 2 : 1;
  const every = tight ? Math.ceil((ticks.length * (turned ? 15 : 8)) / (right - MARGIN.left)) : 1;
  ticks.forEach((tick, place) => {
    const at = x(tick.at);
    if (!spec.x.categories) group.append(draw("line", { x1: at, x2: at, y1: bottom, y2: bottom + 5 }));
    if (tick.label === "" || place % every) return;
    group.append(draw("text", { x: at, y: bottom + (rows === 2 ? 12 + 11 * ((place / every) % 2) : 18), "text-anchor": turned ? "end" : "middle", transform: turned ? `rotate(-40 ${at} ${bottom + 14})` : null }, tick.label));
  });
  group.append(draw("path", { class: "frame", d: `M${MARGIN.left} ${MARGIN.top}V${bottom}H${right}` }));
  group.append(draw("text", { class: "title", x: (MARGIN.left + right) / 2, y: height - 6, "text-anchor": "middle" }, spec.x.title));
  group.append(draw("text", { class: "title", x: 0, y: 0, "text-anchor": "middle", transform: `translate(14 ${(MARGIN.top + bottom) / 2}) rotate(-90)` }, spec.y.title));
  return group;
}

function bandOf(band, x, y, width, height) {
  const left = known(band.x0) ? x(band.x0) - (band.half || 0) : MARGIN.left, right = known(band.x1) ? x(band.x1) + (band.half || 0) : width - MARGIN.right;
  const low = known(band.y0) ? y(band.y0) : height - MARGIN.bottom, high = known(band.y1) ? y(band.y1) : MARGIN.top;
  return draw("rect", { class: `band ${band.class || ""}`, x: Math.min(left, right), y: Math.min(low, high), width: Math.abs(right - left), height: Math.max(1, Math.abs(low - high)) }, draw("title", {}, band.label || ""));
}

function lineOf(line, x, y, width) {
  const points = line.points.filter(([a, b]) => known(a) && known(b)).map(([a, b]) => `${x(a).toFixed(1)} ${y(b).toFixed(1)}`);
  const group = draw("g", { class: `line ${line.class || ""}` }, draw("path", { d: `M${points.join("L")}` }, draw("title", {}, line.label || "")));
  if (line.label && points.length && !line.quiet) {
    const [a, b] = points[points.length - 1].split(" ").map(Number);
    const end = a > width - 150;
    group.append(draw("text", { x: end ? width - MARGIN.right - 2 : a + 4, y: b - 5, "text-anchor": end ? "end" : "start" }, line.label));
  }
  for (const [a, b, label] of line.ticks || []) group.append(draw("circle", { cx: x(a), cy: y(b), r: 2 }), draw("text", { x: x(a) + 5, y: y(b) + 12 }, label));
  return group;
}

function markOf(mark, x, y, height) {
  const at = x(mark.x) + (mark.shift || 0), place = y(mark.y);
  const classes = ["mark", mark.colour || "k0", mark.faint ? "faint" : "", mark.out ? "out" : "", known(mark.spot) && mark.spot === chosen.spot ? "sel" : ""];
  const group = draw("g", { class: classes.filter(Boolean).join(" "), "data-spot": known(mark.spot) ? mark.spot : null });
  if (known(mark.lo) && known(mark.hi)) group.append(draw("path", { class: "whisker", d: `M${at} ${y(mark.lo)}V${y(mark.hi)}` }));
  if (known(mark.left) && known(mark.right)) group.append(draw("path", { class: "whisker", d: `M${x(mark.left)} ${place}H${x(mark.right)}` }));
  if (mark.wide) group.append(draw("path", { class: "wide", d: `M${at} ${y(mark.wide[0])}V${y(mark.wide[1])}` }));
  if (mark.limit) {
    const end = mark.limit === "upper" ? Math.min(place + 22, height - MARGIN.bottom) : Math.max(place - 22, MARGIN.top), back = mark.limit === "upper" ? -5 : 5;
    group.append(draw("path", { class: "arrow", d: `M${at - 5} ${place}h10M${at} ${place}V${end}m-4 ${back}L${at} ${end}l4 ${back}` }));
  } else group.append(draw("path", { class: "dot", d: shapeOf(mark.shape || "circle", at, place, mark.size || 4.2) }));
  group.append(draw("circle", { class: "ring", cx: at, cy: place, r: 9 }), draw("title", {}, mark.label));
  return group;
}

function shapeOf(shape, x, y, r) {
  const paths = {
    circle: `M${x - r} ${y}a${r} ${r} 0 1 0 ${2 * r} 0a${r} ${r} 0 1 0 ${-2 * r} 0Z`,
    square: `M${x - r * 0.9} ${y - r * 0.9}h${r * 1.8}v${r * 1.8}h${-r * 1.8}Z`,
    triangle: `M${x} ${y - r * 1.2}L${x + r * 1.1} ${y + r * 0.8}H${x - r * 1.1}Z`,
    down: `M${x} ${y + r * 1.2}L${x + r * 1.1} ${y - r * 0.8}H${x - r * 1.1}Z`,
    diamond: `M${x} ${y - r * 1.3}L${x + r * 1.1} ${y}L${x} ${y + r * 1.3}L${x - r * 1.1} ${y}Z`,
    bar: `M${x - r * 1.3} ${y - r * 0.5}h${r * 2.6}v${r}h${-r * 2.6}Z`,
    plus: `M${x - r * 1.2} ${y - r * 0.4}h${r * 0.8}v${-r * 0.8}h${r * 0.8}v${r * 0.8}h${r * 0.8}v${r * 0.8}h${-r * 0.8}v${r * 0.8}h${-r * 0.8}v${-r * 0.8}h${-r * 0.8}Z`,
    star: `M${x} ${y - r * 1.4}l${r * 0.4} ${r}l${r} ${r * 0.4}l${-r} ${r * 0.4}l${-r * 0.4} ${r}l${-r * 0.4} ${-r}l${-r} ${-r * 0.4}l${r} ${-r * 0.4}Z`,
  };
  return paths[shape];
}

function legendOf(entries) {
  const list = make("ul", { class: "legend" });
  for (const entry of entries) {
    const sample = draw("svg", { width: 18, height: 14, viewBox: "0 0 18 14", "aria-hidden": "true" });
    if (entry.line) sample.append(draw("g", { class: `line ${entry.line}` }, draw("path", { d: "M1 7H17" })));
    else if (entry.band) sample.append(draw("rect", { class: `band ${entry.band}`, x: 1, y: 2, width: 16, height: 10 }));
    else sample.append(draw("g", { class: `mark ${entry.colour} ${entry.out ? "out" : ""}` }, draw("path", entry.limit ? { class: "arrow", d: "M4 2h10M9 2v10m-4 -4l4 4l4 -4" } : { class: "dot", d: shapeOf(entry.shape || "circle", 9, 7, 4.2) })));
    list.append(make("li", {}, sample, entry.label));
  }
  return list;
}

/** The picture as a table for those who cannot see it, filled when it is opened. */
function tableOf(spec) {
  const details = make("details", { class: "as-table" }, make("summary", {}, "The points as a list"));
  details.addEventListener("toggle", () => {
    if (details.open && details.children.length === 1) details.append(make("ul", {}, spec.marks.map((mark) => make("li", {}, mark.label))));
  });
  return details;
}

function listen(image, layer, marks, readout) {
  const groups = [...layer.children];
  let current = -1;
  const show = (at) => {
    if (current >= 0) groups[current].classList.remove("cur");
    current = at;
    if (at < 0) return;
    groups[at].classList.add("cur");
    readout.textContent = marks[at].label;
  };
  const open = (at) => {
    if (at < 0) return;
    if (known(marks[at].spot)) choose({ spot: marks[at].spot });
    else if (marks[at].go) choose(marks[at].go);
  };
  const order = marks.map((_, at) => at).sort((a, b) => marks[a].x - marks[b].x || marks[a].y - marks[b].y);
  layer.addEventListener("pointerover", (event) => show(groups.indexOf(event.target.closest(".mark"))));
  layer.addEventListener("click", (event) => open(groups.indexOf(event.target.closest(".mark"))));
  image.addEventListener("blur", () => show(-1));
  image.addEventListener("keydown", (event) => {
    const step = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
    if (step) show(order[(order.indexOf(current) + step + order.length + (current < 0 && step < 0 ? 1 : 0)) % order.length]);
    else if (event.key === "Enter" || event.key === " ") open(current);
    else if (event.key === "Escape") choose({ spot: null });
    else return;
    event.preventDefault();
  });
}
