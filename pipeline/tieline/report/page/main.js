// Puts the page together: choices, pictures drawn when they come into view, and drawn again when a choice changes.

const holders = [...document.querySelectorAll("[data-picture]")];
const stale = new Set(holders), near = new Set();

function drawPicture(holder) {
  stale.delete(holder);
  if (holder.dataset.picture === "budget") showBudget(holder);
  else plot(holder, PICTURES[holder.dataset.picture]());
}
function drawNear() {
  for (const holder of near) if (stale.has(holder)) drawPicture(holder);
}
const watcher = new IntersectionObserver((entries) => {
  for (const entry of entries) entry.isIntersecting ? near.add(entry.target) : near.delete(entry.target);
  drawNear();
}, { rootMargin: "300px" });

function picker(id, values, key, all) {
  const select = document.getElementById(id);
  select.replaceChildren(...(all ? [make("option", { value: "" }, all)] : []), ...values.map((value) => make("option", { value }, value)));
  select.value = chosen[key];
  select.onchange = () => choose({ [key]: select.value });
}
function fillPickers() {
  const tracers = tracersOf(chosen.pair), elements = ELEMENTS.filter((element) => D.element.some((one, at) => one === element && D.pair[at] === chosen.pair));
  if (!elements.includes(chosen.element)) chosen.element = elements[0] || "";
  if (!tracers.includes(chosen.tracer)) chosen.tracer = tracers.find((element) => ["Ba", "Rb", "Cs", "K", "La", "Th", "U"].includes(element)) || tracers[0] || chosen.element;
  picker("pick-pair", PAIRS, "pair");
  picker("pick-experiment", EXPERIMENTS, "experiment", "all experiments");
  picker("pick-element", elements, "element");
  const conditions = unique(DATA.trends.map((one) => one.condition));
  if (!conditions.includes(chosen.condition)) chosen.condition = conditions[0] || "";
  if (conditions.length) picker("pick-condition", conditions, "condition");
  picker("pick-tracer", tracers.length ? tracers : elements, "tracer");
}

whenChosen.push((change) => {
  if ("spot" in change) showSpot();
  if (Object.keys(change).some((key) => key !== "spot")) {
    fillPickers();
    document.querySelectorAll("[data-name]").forEach((place) => (place.textContent = phasesOf(chosen.pair)[place.dataset.name === "alpha" ? 0 : 1]));
    holders.forEach((holder) => stale.add(holder));
    drawNear();
  }
});

buildTable();
showRulings();
const widest = PAIRS.map((pair) => [rowsOf((at) => D.pair[at] === pair).length, pair]).sort((a, b) => b[0] - a[0]);
choose({ pair: widest.length ? widest[0][1] : "", element: ELEMENTS.includes("Ni") ? "Ni" : ELEMENTS[0] || "" });
holders.forEach((holder) => watcher.observe(holder));
document.getElementById("rulings-save").addEventListener("click", saveRulings);
document.getElementById("methods-copy").addEventListener("click", () => copyText(document.getElementById("methods-text").textContent, document.getElementById("methods-copied")));
document.querySelectorAll("[data-spot-link]").forEach((button) => button.addEventListener("click", () => choose({ spot: Number(button.dataset.spotLink) })));
document.addEventListener("keydown", (event) => event.key === "Escape" && chosen.spot !== null && choose({ spot: null }));
addEventListener("beforeprint", () => { document.querySelectorAll("details.in-print").forEach((one) => (one.open = true)); holders.forEach((holder) => stale.has(holder) && drawPicture(holder)); });
addEventListener("beforeunload", (event) => unsaved && event.preventDefault());
let width = innerWidth;
addEventListener("resize", () => {
  if (Math.abs(innerWidth - width) < 20) return;
  width = innerWidth;
  holders.forEach((holder) => stale.add(holder));
  drawNear();
});
document.documentElement.dataset.ready = "yes";
