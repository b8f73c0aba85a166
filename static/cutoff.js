// The cutoff desk: how many number states a calculation must keep, and where a stated cutoff is enough.

import { Cursor } from "./cursor.js";
import { DeskForm } from "./desk_form.js";
import { DeskTables } from "./desk_tables.js";
import { Watch } from "./jobs.js";
import { looks, paper } from "./looks.js";
import { ask, askJson, post, withQuery } from "./net.js";
import { Plot } from "./plot.js";
import { Share } from "./share.js";
import { part, Progress, showFace as applyFace, showLink as applyLink, showProvenance, stopWaiting, wait, ZoomKeeper } from "./sheet_page.js";

const POLL = 1000;

const boot = JSON.parse(part("boot").textContent);
const state = { query: boot.query, id: null, title: part("title").textContent, margins: null };
// an address with a short name keeps it
if (location.search.startsWith("?stored=")) state.query = location.search.slice(1);

const plot = new Plot(part("plot"), part("stage"));
const cursor = new Cursor(part("plot-cursor"), part("stage"), plot);
const form = new DeskForm(part("form"), { commit: () => commit(), drag: () => {}, reword: () => reword() });
const tables = new DeskTables();
const watch = new Watch(boot, { picture: draw, progress: (facts) => progress.show(facts), ended: (facts) => progress.ended(facts), failed });
const progress = new Progress({ cancel: () => watch.cancel(), goOn: () => compute() });
const keeper = new ZoomKeeper(form, "api/cutoff/link", { replaced, failed });

const address = (query) => withQuery("cutoff", query);
const absolute = (query) => new URL(address(query), location.href).href;

new Share(plot, () => ({ query: state.query, href: absolute(state.query), id: state.id, title: `Cutoffs: ${state.title}` }), "api/cutoff", "softmode-cutoffs");
looks(() => plot.draw());
paper(plot, () => cursor.place());

plot.onDrawn = () => cursor.place();
plot.onZoom = (range) => keeper.zoomed(range);
cursor.onMove = (point) => tables.strip(point, cursor.pinned !== null);
cursor.describe = (point) => tables.describe(point);
cursor.onPin = (value) => {
  form.box("at").value = value === null ? "" : String(value);
  commit();
};
tables.onStep = (count) => cursor.step(count);
tables.onPin = () => cursor.pin();

// -- the answer -------------------------------------------------------------------------------------

async function draw(picture) {
  const { readout, words } = picture;
  plot.whole = [readout.axis.values[0], readout.axis.values.at(-1)];
  stopWaiting();
  part("stage").setAttribute("aria-busy", String(!picture.complete));
  state.id = readout.id;
  showProvenance(readout.provenance, state.id);
  tables.feed(picture);
  showWords(words);
  part("content").hidden = false;
  const isMap = !readout.x;
  part("plot-cursor").hidden = isMap;
  part("strip").hidden = isMap;
  const drawn = plot.show(picture.figure);
  if (!isMap) cursor.feed(tables.points(), form.pinned);
  await drawn;
  if (picture.complete) {
    document.documentElement.dataset.answered = readout.id;
    showMargins(readout);
  }
}

function showWords(words) {
  part("headline").textContent = words.headline;
  part("decided").textContent = words.decided;
  part("caution").textContent = words.caution;
  part("caution").hidden = !words.caution;
  part("reverse").hidden = words.stated === null;
  part("reverse-section").hidden = words.stated === null;
  if (words.stated === null) return;
  part("verdict").textContent = words.stated.verdict;
  part("verdict").classList.toggle("short", !words.stated.enough);
  part("where").replaceChildren(...words.stated.where.map((text) => Object.assign(document.createElement("li"), { textContent: `enough for ${text}` })));
}

// What larger cutoffs bring at the point that decides, and the false plateaus there; asked for once the answer is there.
async function showMargins(readout) {
  const { deciding, covering } = readout.summary;
  const key = deciding === null ? null : `${readout.id} ${deciding.point} ${covering}`;
  if (key === state.margins) return;
  state.margins = key;
  tables.clearMargins(key === null ? "" : "Computing the margins…");
  if (key === null) return;
  const query = state.query;
  try {
    for (;;) {
      const answer = await ask(withQuery("api/cutoff/margins", query, `point=${deciding.point}`, `cutoff=${covering}`));
      if (state.margins !== key) return;
      if (answer.status !== 202) {
        const found = await answer.json();
        if (state.margins === key) tables.margins(found);
        return;
      }
      await new Promise((resolve) => setTimeout(resolve, POLL));
    }
  } catch (problem) {
    if (state.margins === key) tables.clearMargins(problem.message);
  }
}

function failed(problem) {
  progress.failed(problem, form);
}

// -- state ------------------------------------------------------------------------------------------

function compute() {
  part("message").hidden = true;
  delete document.documentElement.dataset.answered;
  for (const id of ["toolbar", "stage", "model", "answer"]) part(id).hidden = false;
  part("stage").setAttribute("aria-busy", "true");
  wait(plot);
  return watch.begin(address(state.query), state.query);
}

function showLink() {
  applyLink(absolute(state.query), withQuery("api/cutoff", state.query));
}

async function showFace(query, before) {
  const face = await askJson(withQuery("api/cutoff/face", query, `coupling_as=${form.couplingAs.value}`));
  if (query !== state.query) return;
  state.title = face.title;
  applyFace(face, `Cutoffs: ${face.title}`);
  part("to-sweep").href = withQuery("sweep", face.sweep);
  form.show(face, before);
}

let ticket = 0;

// A committed change: one history entry, the same page, a new answer. A change that asks nothing new pushes none.
async function commit() {
  const mine = (ticket += 1);
  if (!form.isNew) return;
  const before = form.snapshot();
  form.committed = before;
  let answer;
  try {
    answer = await post("api/cutoff/link", form.fields());
  } catch (problem) {
    form.committed = null; // whatever comes next is new
    if (mine === ticket) failed(problem);
    return;
  }
  if (mine !== ticket) return;
  form.clearProblems();
  part("message").hidden = true;
  const same = answer.query === state.query && !boot.error;
  if (!same) {
    history.pushState(null, "", address(answer.query));
    part("invented").hidden = true;
  }
  boot.error = null;
  state.query = answer.query;
  showLink();
  try {
    // what is computed already is there at once, only its picture is new
    await Promise.all([same ? null : compute(), showFace(answer.query, before)]);
  } catch (problem) {
    failed(problem);
  }
}

// Back and Forward: the address is the state.
window.addEventListener("popstate", async () => {
  ticket += 1;
  state.query = location.search.slice(1);
  part("invented").hidden = !(part("invented").textContent && !state.query);
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

function replaced(answer) {
  state.query = answer.query;
  if (watch.run) watch.run.query = watch.query = answer.query;
  history.replaceState(null, "", address(answer.query));
  showLink();
}

// -- start ------------------------------------------------------------------------------------------

showLink();
form.begin(boot.texts);
if (boot.error) form.problem(boot.error);
else compute();
