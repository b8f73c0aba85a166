// The page of one point: levels, numbers of the state, and its pictures.

import { bound, plain } from "./format.js";
import { looks, paper } from "./looks.js";
import { ask, Problem, withQuery } from "./net.js";
import { key as keyOf } from "./overlay.js";
import { copyText, save } from "./share.js";
import { part, showProvenance } from "./sheet_page.js";
import { resolver, size } from "./tokens.js";
import { cellOf, element, Values } from "./values.js";

const NARROW = 480;
const SCALE_WIDTH = 62;
const ROUNDING = 1e-12;
const POLL = 1000;
const NAMES = ["distribution", "wigner", "husimi", "noise"];
const WIDE = ["distribution", "convergence"];
// shown first, then whatever else there is
const ORDER = ["entropy", "squeezing", "squeezing_ramsey", "bunching", "boson_number", "boson_variance"];

const PLATEAU_WORDS = { energy: "ground energy", gap: "gap", boson_number: "boson number", order_parameter: "order parameter" };

const boot = JSON.parse(part("boot").textContent);
const here = new URL(withQuery("point", boot.query), location.href).href;
const values = new Values();

class Pictures {
  constructor() {
    this.figures = null;
    this.fixedWidth = null;
    this.shrink = 1;
  }

  async draw() {
    if (!this.figures) return;
    const resolve = resolver();
    await Promise.all(Object.keys(this.figures).map((name) => this.one(name, resolve)));
  }

  one(name, resolve) {
    const { data, layout, config } = this.figures[name];
    const half = this.fixedWidth === null || WIDE.includes(name) ? 1 : 0.49;
    const width = this.fixedWidth === null ? part(name).clientWidth : Math.round(this.fixedWidth * half);
    const margin = { ...layout.margin };
    if (width < NARROW) margin.l = 54;
    const grow = Math.max(1, size("size-tick") / 13);
    margin.l = Math.round(margin.l * grow);
    margin.b = Math.round(margin.b * grow);
    // maps are square inside, beside their scale
    const square = Math.min(520, width - margin.l - margin.r - SCALE_WIDTH) + margin.t + margin.b;
    const height = WIDE.includes(name) ? layout.height * this.shrink * grow : square;
    return window.Plotly.react(part(name), resolve(data), resolve({ ...layout, width, height, margin }), config);
  }
}

const pictures = new Pictures();

function row(table, cells, head = false) {
  const made = element("tr");
  for (const text of cells) {
    const cell = element(head ? "th" : "td");
    if (head) cell.scope = "col";
    if (typeof text === "string") cell.textContent = text;
    else cell.append(element("span", "value", text.value), " ", element("span", "bound", text.bound));
    made.append(cell);
  }
  table.append(made);
  return made;
}

function showLevels(curve) {
  const table = part("levels");
  row(table, ["level", "energy", "above ground", "to next", "parity, claim"], true);
  const count = curve.series.energy[0].length;
  for (let rank = 0; rank < count; rank += 1) {
    const level = values.level(curve, 0, rank);
    const above = rank === 0 ? "–" : values.distance(curve, 0, 0, rank);
    const made = row(table, [`E${rank}`, level, above, values.distance(curve, 0, rank, rank + 1), level.status]);
    made.firstChild.classList.add("words");
    const parity = { 1: "even", "-1": "odd" }[curve.series.parity[0][rank]];
    made.lastChild.classList.add("words");
    if (parity) made.lastChild.prepend(element("span", `swatch token-${parity}`, parity === "even" ? "●" : "○"));
  }
}

function showNumbers(curve) {
  const { series } = curve;
  const open = series.meets_tolerance[0] === false;
  part("status").textContent = open ? "⚠ not yet within tol" : "every level within tol";
  part("status").classList.toggle("open", open);
  part("cutoffs").replaceChildren(
    cellOf("Cutoff needed", plain(series.cutoff_needed[0]), ""),
    cellOf("Cutoff used", plain(series.cutoff_used[0]), `${series.basis[0]} basis`),
  );
  const rank = (field) => (ORDER.includes(field.key) ? ORDER.indexOf(field.key) : ORDER.length);
  const fields = values.data.fields.filter((field) => !field.key.startsWith("cutoff"));
  for (const field of [...fields].sort((a, b) => rank(a) - rank(b))) {
    const shown = values.number(curve, 0, field);
    part("numbers").append(cellOf(`${field.title} ${field.symbol}`, shown.value, series[field.key][0] === null ? "" : shown.bound));
  }
  part("why").textContent = values.reason(curve, 0);
}

function showPortrait(portrait) {
  const tail = portrait.above_needed === null ? "" : `, weight above the needed cutoff ${tailWords(portrait.above_needed)}`;
  part("told-distribution").textContent = `mean ${plain(portrait.mean, 6)}${tail}`;
  const centre = Math.abs(portrait.parity_of_n) < ROUNDING ? "0" : plain((2 / Math.PI) * portrait.parity_of_n, 4);
  const zero = `spin traced out; W(0) = ${centre}, 2/π of the mean parity of n`;
  const coarse = "this grid does not resolve everything: a state of broken symmetry can be drawn finer";
  part("told-wigner").textContent = portrait.resolved ? zero : `${zero}; ⚠ ${coarse}`;
  part("states").hidden = !portrait.doublet_closed;
}

function showNoise(noise) {
  const length = noise.mean_spin > 0 ? `mean spin ${plain(noise.mean_spin, 4)} of N/2` : "no mean spin; drawn across z";
  part("told-noise").textContent = `${length}; dashed: coherent spin state`;
}

function tailWords(weight) {
  return weight > 0 ? bound(weight) : "0";
}

function failed(problem) {
  const facts = problem.facts ?? { message: String(problem.message), allowed: null };
  const lines = [facts.message, ...(facts.allowed ? [`Allowed: ${facts.allowed}`] : [])];
  part("message").replaceChildren(...lines.map((text) => element("p", "", text)));
  part("message").hidden = false;
  part("waiting").hidden = true;
}

// A point that takes long, or has to wait for others, is asked for again.
async function fetchPoint(path) {
  for (;;) {
    try {
      const answer = await ask(withQuery(path, boot.query));
      if (answer.status !== 202) return await answer.json();
    } catch (problem) {
      if (problem.status !== 503) throw problem;
    }
    await new Promise((resolve) => setTimeout(resolve, POLL));
  }
}

async function show() {
  const found = await fetchPoint("api/point/picture");
  values.data = found.readout;
  const [curve] = found.readout.curves;
  showLevels(curve);
  showNumbers(curve);
  showPortrait(found.portrait);
  showNoise(found.portrait.noise);
  showProvenance(found.readout.provenance, found.readout.id);
  part("waiting").hidden = true;
  part("content").hidden = false;
  pictures.figures = found.figures;
  await pictures.draw();
  document.documentElement.dataset.drawn = "";
  // many calculations: only for somebody who looks
  new IntersectionObserver((entries, observer) => {
    if (!entries.some((entry) => entry.isIntersecting)) return;
    observer.disconnect();
    showConvergence().catch((problem) => {
      part("told-convergence").textContent = `No comparison: ${problem.message}`;
    });
  }).observe(part("convergence-part"));
}

async function showConvergence() {
  const found = await fetchPoint("api/point/convergence");
  const { shifted, fock } = found.bases;
  const told = ["Errors of truncated calculations against the certified answer; what one solve tells is a bound for the levels, an estimate for the others."];
  if (fock) told.push(`Number states: ${fock.cutoffs.length} cutoffs up to ${fock.cutoffs.at(-1)}.`);
  if (shifted) told.push(`Displaced ladders: up to ${shifted.cutoffs.at(-1)} on each ladder.`);
  part("told-convergence").textContent = [...told, ...found.notes].join(" ");
  part("key-convergence").replaceChildren(keyOf(found.key));
  const lines = (fock?.plateaus ?? []).map((one) => `⚠ False plateau: from cutoff ${one.from} to ${one.to} the ${PLATEAU_WORDS[one.quantity]} looks settled at ${plain(one.value, 6)}; it is ${plain(one.truth, 6)}.`);
  part("plateaus").replaceChildren(...lines.map((line) => element("p", "", line)));
  part("plateaus").hidden = lines.length === 0;
  pictures.figures = { ...pictures.figures, convergence: found.figure };
  await pictures.draw();
  document.documentElement.dataset.compared = "";
}

function say(words) {
  part("said").textContent = words;
}

async function saveJson() {
  try {
    const answer = await ask(withQuery("api/point", boot.query));
    save(await answer.blob(), `softmode-${values.data.id.slice(0, 12)}.json`);
    say("JSON saved.");
  } catch (problem) {
    if (!(problem instanceof Problem)) throw problem;
    say(problem.message);
  }
}

async function copyLink() {
  const copied = await copyText(here);
  if (!copied) part("link").select();
  say(copied ? "Link copied." : "Select the link and copy it by hand.");
}

looks(() => pictures.draw());
if (!boot.error) {
  part("link").value = here;
  part("print-link").textContent = here;
  part("link").addEventListener("focus", () => part("link").select());
  part("copy-link").addEventListener("click", copyLink);
  part("save-json").addEventListener("click", saveJson);
  part("print").addEventListener("click", () => window.print());
  paper(pictures, () => {});
  let width = 0;
  new ResizeObserver(() => {
    if (pictures.fixedWidth !== null || part("content").clientWidth === width) return;
    width = part("content").clientWidth;
    pictures.draw();
  }).observe(part("content"));
  show().catch((problem) => failed(problem));
}

// Left and right arrows lead to the neighbours, unless something under the focus has a use for them.
document.addEventListener("keydown", (event) => {
  const way = { ArrowLeft: "way-prev", ArrowRight: "way-next" }[event.key];
  if (!way || event.altKey || event.ctrlKey || event.metaKey || event.shiftKey) return;
  if (event.target.closest("input, select, textarea, .scroller")) return;
  part(way)?.click();
});
