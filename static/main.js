// The sweep page: one state, written as the address, shown by plots, strip and form.

import { Cursor } from "./cursor.js";
import { Form } from "./form.js";
import { glimpse, Watch } from "./jobs.js";
import { looks, paper } from "./looks.js";
import { askJson, post, withQuery } from "./net.js";
import { Plot } from "./plot.js";
import { Readout } from "./readout.js";
import { Share } from "./share.js";
import { part, Progress, showFace as applyFace, showLink as applyLink, showProvenance, stopWaiting, wait, ZoomKeeper } from "./sheet_page.js";

const GLIMPSE_POINTS = 21;
const GLIMPSE_PATIENCE = 700;
const ADDRESS_PAUSE = 300;
const FACE_PATIENCE = 400;

const boot = JSON.parse(part("boot").textContent);
const state = { query: boot.query, id: null, title: part("title").textContent, whole: null };
// an address with a short name keeps it
if (location.search.startsWith("?stored=")) state.query = location.search.slice(1);

const plot = new Plot(part("plot"), part("stage"));
const cursor = new Cursor(part("plot-cursor"), part("stage"), plot);
const readout = new Readout(part("strip"), part("more"), part("more-table"), part("run-sheet"));
const form = new Form(part("form"), { commit: () => commit(), drag: () => drag(), reword: () => reword() });
const watch = new Watch(boot, { picture: draw, progress: (facts) => progress.show(facts), ended: (facts) => progress.ended(facts), failed });
const progress = new Progress({ cancel: () => watch.cancel(), goOn: () => compute() });
const keeper = new ZoomKeeper(form, "api/link", { replaced, failed });

const address = (query) => withQuery("sweep", query);
const absolute = (query) => new URL(address(query), location.href).href;

new Share(plot, () => ({ query: state.query, href: absolute(state.query), id: state.id, title: state.title }));
looks(() => plot.draw());
paper(plot, () => cursor.place());

plot.onDrawn = () => cursor.place();
plot.onZoom = (range) => keeper.zoomed(range);
cursor.onMove = (point) => readout.show(point, cursor.pinned !== null);
cursor.describe = (point) => readout.describe(point);
cursor.onPin = (value) => pinned(value);
readout.onStep = (count) => cursor.step(count);
readout.onPin = () => cursor.pin();
readout.onOpen = () => openPoint();

// -- pictures ---------------------------------------------------------------------------------------

async function draw(picture) {
  plot.whole = wholeRange(picture);
  state.id = picture.readout.id;
  stopWaiting();
  // the plots first: they measure the page, which is slow while the rest of it changes
  const drawn = plot.show(picture.figure);
  part("stage").setAttribute("aria-busy", String(!picture.complete));
  readout.feed(picture.readout);
  showProvenance(picture.readout.provenance, state.id);
  cursor.feed(readout.points(), picture.readout.pinned);
  await drawn;
  if (picture.complete) plot.rehearse();
}

function wholeRange(picture) {
  const { values } = picture.readout.axis;
  return [values[0], values.at(-1)];
}

function failed(problem) {
  progress.failed(problem, form);
}

// -- state ------------------------------------------------------------------------------------------

function compute() {
  reveal();
  return watch.begin(address(state.query), state.query);
}

// Room for the picture, and a word where there is none yet.
function reveal() {
  part("message").hidden = true;
  for (const id of ["toolbar", "stage", "stage-hint", "model"]) part(id).hidden = false;
  wait(plot);
}

function showLink() {
  applyLink(absolute(state.query), withQuery("api/sweep", state.query));
  part("to-cutoff").href = withQuery("cutoff", state.query);
  part("to-map").href = withQuery("sweep/map", state.query);
}

async function showFace(query, before) {
  const face = await askJson(withQuery("api/face", query, `coupling_as=${form.couplingAs.value}`));
  if (query !== state.query) return;
  state.title = face.title;
  applyFace(face, face.title);
  form.show(face, before);
}

let ticket = 0;

// A committed change: one history entry, the same page, new plots. A change that asks nothing new pushes none.
async function commit() {
  const mine = (ticket += 1);
  const start = dragStart;
  dragStart = null;
  // what was dragged over is not history
  if (start !== null) history.replaceState(null, "", start);
  if (!form.isNew) {
    if (start !== null) compute();
    return;
  }
  const before = form.snapshot();
  form.committed = before;
  let answer;
  try {
    answer = await watch.ask(form.fields());
  } catch (problem) {
    form.committed = null; // whatever comes next is new
    if (mine === ticket) failed(problem);
    return;
  }
  if (mine !== ticket) {
    watch.drop(answer.id, answer.lease);
    return;
  }
  form.clearProblems();
  const { query } = answer.address;
  if (query !== state.query || boot.error) {
    history.pushState(null, "", address(query));
    part("invented").hidden = true;
  }
  boot.error = null;
  state.query = query;
  showLink();
  // the first curve comes before the words around it
  const pause = new Promise((resolve) => setTimeout(resolve, FACE_PATIENCE));
  reveal();
  await Promise.race([watch.follow(address(query), query, answer), pause]);
  try {
    await showFace(query, before);
  } catch (problem) {
    failed(problem);
  }
}

// Back and Forward: the address is the state.
window.addEventListener("popstate", async () => {
  ticket += 1;
  dragStart = null;
  const atFront = !location.pathname.endsWith("/sweep") && !location.search;
  const query = atFront ? boot.query : location.search.slice(1);
  state.query = query;
  part("invented").hidden = !(atFront && part("invented").textContent);
  form.clearProblems();
  showLink();
  try {
    await Promise.all([showFace(query, null), compute()]);
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

// -- cursor and zoom --------------------------------------------------------------------------------

function pinned(value) {
  form.box("at").value = value === null ? "" : String(value);
  readout.show(cursor.point, value !== null);
  commit();
}

// The point under the cursor, on its own page; the way back leads to the sweep with the cursor pinned there.
async function openPoint() {
  const value = readout.data.axis.values[readout.point];
  try {
    const answer = await post("api/link", form.fields({ at: String(value) }));
    location.assign(withQuery("point", answer.query));
  } catch (problem) {
    failed(problem);
  }
}

function replaced(answer) {
  state.query = answer.query;
  if (watch.run) watch.run.query = watch.query = answer.query;
  history.replaceState(null, "", address(answer.query));
  showLink();
}

// -- dragging ---------------------------------------------------------------------------------------

let dragStart = null;
let dragging = false;
let dragAgain = false;
let lastAddress = 0;
let slow = false;

// While a slider moves: the address is replaced now and then, and coarse pictures are drawn if they are quick.
async function drag() {
  if (dragStart === null) {
    dragStart = location.href;
    slow = false;
  }
  if (dragging) {
    dragAgain = true;
    return;
  }
  dragging = true;
  try {
    do {
      dragAgain = false;
      await dragStep(ticket);
    } while (dragAgain && dragStart !== null);
  } catch (problem) {
    if (dragStart !== null) failed(problem);
  } finally {
    dragging = false;
  }
}

async function dragStep(mine) {
  const now = performance.now();
  if (now - lastAddress > ADDRESS_PAUSE) {
    lastAddress = now;
    const answer = await post("api/link", form.fields());
    if (mine !== ticket || dragStart === null) return;
    history.replaceState(null, "", address(answer.query));
  }
  if (slow) return;
  const points = Math.min(GLIMPSE_POINTS, Number(form.box("points").value || form.box("points").placeholder));
  const coarse = await post("api/link", form.fields({ points: String(points) }));
  const begun = performance.now();
  const picture = await glimpse(address(coarse.query), coarse.query, GLIMPSE_PATIENCE);
  if (performance.now() - begun > GLIMPSE_PATIENCE) slow = true;
  if (picture && mine === ticket && dragStart !== null) {
    part("title").textContent = picture.title;
    await draw(picture);
  }
}

// -- start ------------------------------------------------------------------------------------------

showLink();
form.texts = boot.texts;
if (boot.error) {
  const facts = boot.error;
  form.problem(facts);
} else compute();
document.querySelector('[data-field="each_values"]').hidden = !form.box("each_name").value;
