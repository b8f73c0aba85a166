// The sweep page: one state, written as the address, shown by plots, strip and form.

import { Cursor } from "./cursor.js";
import { Form } from "./form.js";
import { duration } from "./format.js";
import { glimpse, Watch } from "./jobs.js";
import { looks, paper } from "./looks.js";
import { askJson, post, withQuery } from "./net.js";
import { Plot } from "./plot.js";
import { Readout } from "./readout.js";
import { Share } from "./share.js";

const GLIMPSE_POINTS = 21;
const GLIMPSE_PATIENCE = 700;
const ADDRESS_PAUSE = 300;
const FACE_PATIENCE = 400;

const part = (id) => document.getElementById(id);
const boot = JSON.parse(part("boot").textContent);
const state = { query: boot.query, id: null, title: part("title").textContent, whole: null };
// an address with a short name keeps it
if (location.search.startsWith("?stored=")) state.query = location.search.slice(1);

const plot = new Plot(part("plot"), part("stage"));
const cursor = new Cursor(part("plot-cursor"), part("stage"), plot);
const readout = new Readout(part("strip"), part("more"), part("more-table"), part("run-sheet"));
const form = new Form(part("form"), { commit: () => commit(), drag: () => drag(), reword: () => reword() });
const watch = new Watch(boot, { picture: draw, progress: showProgress, ended, failed });

const address = (query) => withQuery("sweep", query);
const absolute = (query) => new URL(address(query), location.href).href;

new Share(plot, () => ({ query: state.query, href: absolute(state.query), id: state.id, title: state.title }));
looks(() => plot.draw());
paper(plot, () => cursor.place());

plot.onDrawn = () => cursor.place();
plot.onZoom = (range) => zoomed(range);
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
  part("stage").querySelector(".waiting")?.remove();
  // the plots first: they measure the page, which is slow while the rest of it changes
  const drawn = plot.show(picture.figure);
  part("stage").setAttribute("aria-busy", String(!picture.complete));
  readout.feed(picture.readout);
  showProvenance(picture.readout.provenance);
  cursor.feed(readout.points(), picture.readout.pinned);
  await drawn;
  if (picture.complete) plot.rehearse();
}

function wholeRange(picture) {
  const { values } = picture.readout.axis;
  return [values[0], values.at(-1)];
}

function showProvenance(made) {
  const when = made.computed_at ? `computed ${made.computed_at.replace("T", " ")}, ${made.seconds} s of processor time` : "still computing";
  part("provenance").textContent = `Softmode ${made.softmode}, solver ${made.solver.slice(0, 12)}, numpy ${made.numpy}, scipy ${made.scipy}; ${when}; result ${state.id.slice(0, 16)}`;
}

// -- progress ---------------------------------------------------------------------------------------

let showBar = null;

function showProgress(facts) {
  const active = facts.state === "queued" || facts.state === "running";
  part("bar").max = facts.total;
  part("bar").value = facts.done;
  const words = facts.notice ?? (facts.state === "queued" ? "waiting for a free processor" : duration(facts.seconds_left));
  part("progress-words").textContent = `${facts.done} of ${facts.total} points${words ? `, ${words}` : ""}`;
  part("cancel").hidden = !active;
  part("go-on").hidden = true;
  if (active) {
    // a quick sweep is over before a bar could be read
    showBar ??= setTimeout(() => { part("progress").hidden = false; }, 150);
  }
}

function ended(facts) {
  clearTimeout(showBar);
  showBar = null;
  part("cancel").hidden = true;
  if (facts.state === "done") {
    part("progress").hidden = true; // the last picture is on its way
    return;
  }
  part("stage").setAttribute("aria-busy", "false");
  part("stage").querySelector(".waiting")?.remove();
  part("progress").hidden = false;
  const words = { cancelled: "Cancelled", restarting: "The server is restarting", failed: "Failed" }[facts.state] ?? facts.state;
  part("progress-words").textContent = `${words}: ${facts.done} of ${facts.total} points are there.`;
  part("go-on").hidden = facts.state !== "cancelled";
}

function failed(problem) {
  const facts = problem.facts ?? { message: String(problem.message), field: null, allowed: null };
  clearTimeout(showBar);
  showBar = null;
  part("progress").hidden = true;
  part("stage").setAttribute("aria-busy", "false");
  part("stage").querySelector(".waiting")?.remove();
  const atField = facts.field && form.problem(facts);
  const lines = [["p", facts.message]];
  if (!atField && facts.allowed !== null && facts.allowed !== undefined) lines.push(["p", `Allowed: ${facts.allowed}`]);
  part("message").replaceChildren(...lines.map(([tag, text]) => Object.assign(document.createElement(tag), { textContent: text })));
  part("message").hidden = false;
}

part("cancel").addEventListener("click", () => watch.cancel());
part("go-on").addEventListener("click", () => compute());
part("reload-now").addEventListener("click", () => location.reload());

// -- state ------------------------------------------------------------------------------------------

function compute() {
  reveal();
  return watch.begin(address(state.query), state.query);
}

// Room for the picture, and a word where there is none yet.
function reveal() {
  part("message").hidden = true;
  for (const id of ["toolbar", "stage", "stage-hint", "model"]) part(id).hidden = false;
  if (!plot.figure && !part("stage").querySelector(".waiting")) {
    part("stage").append(Object.assign(document.createElement("p"), { className: "waiting", textContent: "Computing the first points…" }));
  }
}

function showLink() {
  part("link").value = absolute(state.query);
  part("print-link").textContent = absolute(state.query);
  part("to-cutoff").href = withQuery("cutoff", state.query);
  const twin = part("twin");
  if (twin) twin.href = withQuery("api/sweep", state.query);
}

async function showFace(query, before) {
  const face = await askJson(withQuery("api/face", query, `coupling_as=${form.couplingAs.value}`));
  if (query !== state.query) return;
  state.title = face.title;
  document.title = `${face.title} – Softmode`;
  part("title").textContent = face.title;
  part("note").textContent = face.note;
  part("note").hidden = !face.note;
  part("member").textContent = face.member;
  part("hamiltonian").innerHTML = face.hamiltonian;
  part("values").replaceChildren(...face.values.map((value) => Object.assign(document.createElement("li"), { innerHTML: value })));
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

let zoomTimer = null;

// Zooming replaces the address, it pushes nothing: the picture is already on the screen.
function zoomed(range) {
  clearTimeout(zoomTimer);
  zoomTimer = setTimeout(async () => {
    const text = range === null ? "" : `${range[0]}:${range[1]}`;
    if (form.box("zoom").value === text) return;
    form.box("zoom").value = text;
    try {
      const answer = await post("api/link", form.fields());
      state.query = answer.query;
      if (watch.run) watch.run.query = watch.query = answer.query;
      form.committed = form.snapshot();
      history.replaceState(null, "", address(answer.query));
      showLink();
    } catch (problem) {
      failed(problem);
    }
  }, ADDRESS_PAUSE);
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
