// The map page: one state, written as the address, shown by the map, its cross-sections, strip and form.

import { bound, plain, supported } from "./format.js";
import { Watch } from "./jobs.js";
import { looks, paper } from "./looks.js";
import { MapCursor } from "./map_cursor.js";
import { Cuts } from "./map_cuts.js";
import { MapForm } from "./map_form.js";
import { MapPlot } from "./map_plot.js";
import { askJson, post, withQuery } from "./net.js";
import { Share } from "./share.js";
import { part, Progress, showFace as applyFace, showLink as applyLink, showProvenance, stopWaiting, wait } from "./sheet_page.js";
import { cellOf, unitOf } from "./values.js";

const WAYS_PAUSE = 150;
const SPEAK_PAUSE = 300;
const WAYS = [["open-point", "point"], ["row-sweep", "row_sweep"], ["column-sweep", "column_sweep"]];
const STATES = ["not settled yet: estimated from cells around it", "interpolated between computed cells, no bound", "computed"];

const boot = JSON.parse(part("boot").textContent);
const state = { query: boot.query, id: null, computation: null, title: part("title").textContent };
// an address with a short name keeps it
if (location.search.startsWith("?stored=")) state.query = location.search.slice(1);

let data = null; // the numbers of the last picture

const plot = new MapPlot(part("plot"), part("stage"));
const cuts = new Cuts(part("cuts"));
const cursor = new MapCursor(part("map-cursor"), part("stage"), plot, { moved, opened: open, zoomed });
const form = new MapForm(part("form"), { commit: () => commit(), drag: () => {}, reword: () => reword() });
const watch = new Watch(boot, { picture: draw, progress: (facts) => progress.show(facts), ended: (facts) => progress.ended(facts), failed });
const progress = new Progress({ cancel: () => watch.cancel(), goOn: () => compute() }, { counted: "cells settled", halted: "cells are settled" });

const address = (query) => withQuery("map", query);
const absolute = (query) => new URL(address(query), location.href).href;

new Share(plot, () => ({ query: state.query, href: absolute(state.query), id: state.id, title: state.title }), "api/map", "softmode-map");
looks(() => {
  plot.draw();
  cuts.draw();
});
paper(plot, () => cursor.place());
plot.onDrawn = () => cursor.place();
plot.onBox = (x, y) => boxed(x, y);

// -- pictures ---------------------------------------------------------------------------------------

async function draw(picture) {
  data = picture.readout;
  state.id = data.id;
  stopWaiting();
  const drawn = plot.show(picture.figure);
  part("stage").setAttribute("aria-busy", String(!picture.complete));
  showProvenance(data.provenance, state.id);
  const { cells, computed } = data.counts;
  const words = picture.complete && computed < cells ? `${computed} of ${cells} cells computed, the others (dots) interpolated.` : `${computed} of ${cells} cells computed.`;
  for (const id of ["counted", "counted-touch"]) part(id).textContent = words;
  await drawn;
  cursor.feed(data.axis.values, data.across.values, history.state?.cell ?? null);
}

// -- cursor -----------------------------------------------------------------------------------------

const at = (axis, number) => `${axis.symbol} = ${plain(Number(axis.values[number].toPrecision(10)))}${unitOf(axis.unit)}`;

function moved(row, column) {
  const { axis, across, shown } = data;
  const value = data.values[row][column];
  const error = data.bounds[row][column];
  const settled = data.state[row][column];
  const place = `${at(axis, column)}, ${at(across, row)}`;
  part("strip").hidden = false;
  part("place").textContent = place;
  part("state").textContent = STATES[settled];
  part("state").classList.toggle("open", settled === 0);
  const text = `${settled === 2 ? supported(value, error) : plain(value, 5)}${value === null ? "" : unitOf(shown.unit)}`;
  const claim = error === null ? "" : `± ${bound(error)}${shown.claim === "estimate" ? " estimated" : ""}`;
  const note = value === null ? data.notes[`${row},${column}`] ?? "" : "";
  const cells = [cellOf(`${shown.title} ${shown.symbol}`, text, claim || note)];
  if (!shown.name.startsWith("cutoff")) cells.push(cellOf("Cutoff needed", plain(data.cutoffs[row][column]), settled === 2 ? "" : "interpolated"));
  part("cells").replaceChildren(...cells);
  part("cut-row-head").textContent = `Row at ${at(across, row)}`;
  part("cut-column-head").textContent = `Column at ${at(axis, column)}`;
  cuts.show(data, row, column);
  speak(`${place}: ${shown.title} ${text} ${claim}, ${STATES[settled]}`);
  waysSoon();
}

let speaking = null;

function speak(words) {
  clearTimeout(speaking);
  speaking = setTimeout(() => { part("spoken").textContent = words; }, SPEAK_PAUSE);
}

let waysTimer = null;

function waysSoon() {
  clearTimeout(waysTimer);
  waysTimer = setTimeout(() => ways().catch(failed), WAYS_PAUSE);
}

// The addresses of the cell under the cursor.
async function ways() {
  clearTimeout(waysTimer);
  const { row, column } = cursor;
  const found = await askJson(withQuery("api/map/cell", state.query, `row=${row}`, `column=${column}`));
  if (row === cursor.row && column === cursor.column) {
    for (const [id, key] of WAYS) {
      part(id).href = found[key] ?? "";
      part(id).hidden = found[key] === null; // multiples of a critical coupling that is 0 there
    }
    part("strip").dataset.cell = `${row},${column}`;
  }
  return found;
}

// The point under the cursor, on its own page; the way back leads to the same cell.
async function open() {
  try {
    const found = await ways();
    if (found.point === null) return;
    remember();
    location.assign(found.point);
  } catch (problem) {
    failed(problem);
  }
}

function remember() {
  history.replaceState({ cell: cursor.here }, "");
}

// a way that is not there yet is waited for
for (const [id, key] of WAYS) {
  part(id).addEventListener("click", async (event) => {
    remember();
    if (part("strip").dataset.cell === `${cursor.row},${cursor.column}`) return;
    event.preventDefault();
    try {
      const found = (await ways())[key];
      if (found !== null) location.assign(found);
    } catch (problem) {
      failed(problem);
    }
  });
}
for (const button of document.querySelectorAll("[data-step]")) {
  button.addEventListener("click", () => cursor.step(...button.dataset.step.split(",").map(Number)));
}
part("zoom-in").addEventListener("click", () => zoomed(0.5));
part("zoom-out").addEventListener("click", () => zoomed(2));

// -- zoom -------------------------------------------------------------------------------------------

// Three digits of what is spanned are as fine as a hand can draw.
function rounded(ends, axis) {
  const step = axis.name === "spins" ? 1 : 10 ** (Math.floor(Math.log10(ends[1] - ends[0])) - 2);
  return ends.map((value) => Number((Math.round(value / step) * step).toPrecision(12)));
}

function within(ends, axis) {
  const [first, last] = [axis.values[0], axis.values.at(-1)];
  return [Math.max(first, Math.min(...ends)), Math.min(last, Math.max(...ends))];
}

function span(axis, names, ends) {
  const [low, high] = rounded(ends, axis);
  if (!(low < high)) return;
  form.box(names[0]).value = String(low);
  form.box(names[1]).value = String(high);
  // whole numbers have only so many places
  if (axis.name === "spins") form.clear(names[2]);
}

function boxed(x, y) {
  if (x) span(data.axis, ["from", "to", "points"], within(x, data.axis));
  if (y) span(data.across, ["low", "high", "rows"], within(y, data.across));
  commit();
}

// In or out around the cursor; quantities that cannot be negative stop at zero.
function zoomed(factor) {
  const [x, y] = cursor.here;
  const around = (axis, here) => {
    const [first, last] = [axis.values[0], axis.values.at(-1)];
    const ends = [here - (here - first) * factor, here + (last - here) * factor];
    const floor = axis.name === "spins" ? 1 : axis.name === "mode" ? first / 2 : 0;
    return first >= floor && axis.name !== "detuning" && axis.name !== "bias" && axis.name !== "splitting" ? [Math.max(floor, ends[0]), ends[1]] : ends;
  };
  span(data.axis, ["from", "to", "points"], around(data.axis, x));
  span(data.across, ["low", "high", "rows"], around(data.across, y));
  commit();
}

function failed(problem) {
  progress.failed(problem, form);
}

// -- state ------------------------------------------------------------------------------------------

function compute() {
  part("message").hidden = true;
  for (const id of ["toolbar", "stage", "stage-hint", "model"]) part(id).hidden = false;
  part("stage").setAttribute("aria-busy", "true");
  wait(plot, "Computing the first cells…");
  return watch.begin(address(state.query), state.query);
}

function showLink() {
  applyLink(absolute(state.query), withQuery("api/map", state.query));
}

async function showFace(query, before) {
  const face = await askJson(withQuery("api/map/face", query, `coupling_as=${form.couplingAs.value}`));
  if (query !== state.query) return;
  state.title = face.title;
  applyFace(face, face.title);
  part("to-sweep").href = withQuery("sweep", face.sweep);
  form.show(face, before);
}

let ticket = 0;

// A committed change: one history entry, the same page, a new map. A change that asks nothing new pushes none.
async function commit() {
  const mine = (ticket += 1);
  if (!form.isNew) return;
  const before = form.snapshot();
  form.committed = before;
  let answer;
  try {
    answer = await post("api/map/link", form.fields());
  } catch (problem) {
    form.committed = null; // whatever comes next is new
    if (mine === ticket) failed(problem);
    return;
  }
  if (mine !== ticket) return;
  form.clearProblems();
  part("message").hidden = true;
  const same = answer.query === state.query && !boot.error;
  if (!same) history.pushState(null, "", address(answer.query));
  boot.error = null;
  const view = answer.id === state.computation && watch.run?.id !== undefined && watch.run.facts?.state !== "cancelled";
  state.query = answer.query;
  state.computation = answer.id;
  showLink();
  try {
    const asked = view ? (same ? null : watch.redraw(answer.query)) : compute();
    await Promise.all([asked, showFace(answer.query, before)]);
  } catch (problem) {
    failed(problem);
  }
}

// Back and Forward: the address is the state.
window.addEventListener("popstate", async () => {
  ticket += 1;
  state.query = location.search.slice(1);
  state.computation = null;
  form.clearProblems();
  showLink();
  try {
    await Promise.all([showFace(state.query, null), compute()]);
  } catch (problem) {
    failed(problem);
  }
});

async function reword() {
  try {
    await showFace(state.query, null);
  } catch (problem) {
    failed(problem);
  }
}

// -- start ------------------------------------------------------------------------------------------

showLink();
form.texts = boot.texts;
if (boot.error) form.problem(boot.error);
else compute();
