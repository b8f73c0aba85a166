// The cutoff desk: how many number states a calculation must keep, and where a stated cutoff is enough.

import { Cursor } from "./cursor.js";
import { DeskForm } from "./desk_form.js";
import { DeskTables } from "./desk_tables.js";
import { duration } from "./format.js";
import { Watch } from "./jobs.js";
import { looks, paper } from "./looks.js";
import { ask, askJson, post, withQuery } from "./net.js";
import { Plot } from "./plot.js";
import { Share } from "./share.js";

const ADDRESS_PAUSE = 300;
const POLL = 1000;

const part = (id) => document.getElementById(id);
const boot = JSON.parse(part("boot").textContent);
const state = { query: boot.query, id: null, title: part("title").textContent, margins: null };
// an address with a short name keeps it
if (location.search.startsWith("?stored=")) state.query = location.search.slice(1);

const plot = new Plot(part("plot"), part("stage"));
const cursor = new Cursor(part("plot-cursor"), part("stage"), plot);
const form = new DeskForm(part("form"), { commit: () => commit(), drag: () => {}, reword: () => reword() });
const tables = new DeskTables();
const watch = new Watch(boot, { picture: draw, progress: showProgress, ended, failed });

const address = (query) => withQuery("cutoff", query);
const absolute = (query) => new URL(address(query), location.href).href;

new Share(plot, () => ({ query: state.query, href: absolute(state.query), id: state.id, title: `Cutoffs: ${state.title}` }), "api/cutoff", "softmode-cutoffs");
looks(() => plot.draw());
paper(plot, () => cursor.place());

plot.onDrawn = () => cursor.place();
plot.onZoom = (range) => zoomed(range);
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
  part("stage").querySelector(".waiting")?.remove();
  part("stage").setAttribute("aria-busy", String(!picture.complete));
  state.id = readout.id;
  showProvenance(readout.provenance);
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

function showProvenance(made) {
  const when = made.computed_at ? `computed ${made.computed_at.replace("T", " ")}, ${made.seconds} s of processor time` : "still computing";
  part("provenance").textContent = `Softmode ${made.softmode}, solver ${made.solver.slice(0, 12)}, numpy ${made.numpy}, scipy ${made.scipy}; ${when}; result ${state.id.slice(0, 16)}`;
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

// -- progress ---------------------------------------------------------------------------------------

let showBar = null;

function showProgress(facts) {
  const active = facts.state === "queued" || facts.state === "running";
  part("bar").max = facts.total;
  part("bar").value = facts.done;
  const words = facts.state === "queued" ? "waiting for a free processor" : duration(facts.seconds_left);
  part("progress-words").textContent = `${facts.done} of ${facts.total} points${words ? `, ${words}` : ""}`;
  part("cancel").hidden = !active;
  part("go-on").hidden = true;
  if (active) showBar ??= setTimeout(() => { part("progress").hidden = false; }, 150);
}

function hideBar() {
  clearTimeout(showBar);
  showBar = null;
  part("progress").hidden = true;
  part("stage").querySelector(".waiting")?.remove();
}

function ended(facts) {
  hideBar();
  if (facts.state === "done") return; // the last picture is on its way
  part("stage").setAttribute("aria-busy", "false");
  part("progress").hidden = false;
  part("cancel").hidden = true;
  const words = { cancelled: "Cancelled", restarting: "The server is restarting", failed: "Failed" }[facts.state] ?? facts.state;
  part("progress-words").textContent = `${words}: ${facts.done} of ${facts.total} points are there.`;
  part("go-on").hidden = facts.state !== "cancelled";
}

function failed(problem) {
  const facts = problem.facts ?? { message: String(problem.message), field: null, allowed: null };
  hideBar();
  part("stage").setAttribute("aria-busy", "false");
  const atField = facts.field && form.problem(facts);
  const lines = [facts.message];
  if (!atField && facts.allowed !== null && facts.allowed !== undefined) lines.push(`Allowed: ${facts.allowed}`);
  part("message").replaceChildren(...lines.map((text) => Object.assign(document.createElement("p"), { textContent: text })));
  part("message").hidden = false;
}

part("cancel").addEventListener("click", () => watch.cancel());
part("go-on").addEventListener("click", () => compute());
part("reload-now").addEventListener("click", () => location.reload());

// -- state ------------------------------------------------------------------------------------------

function compute() {
  part("message").hidden = true;
  delete document.documentElement.dataset.answered;
  for (const id of ["toolbar", "stage", "model", "answer"]) part(id).hidden = false;
  part("stage").setAttribute("aria-busy", "true");
  if (!plot.figure && !part("stage").querySelector(".waiting")) {
    part("stage").append(Object.assign(document.createElement("p"), { className: "waiting", textContent: "Computing the first points…" }));
  }
  return watch.begin(address(state.query), state.query);
}

function showLink() {
  part("link").value = absolute(state.query);
  part("print-link").textContent = absolute(state.query);
  const twin = part("twin");
  if (twin) twin.href = withQuery("api/cutoff", state.query);
}

async function showFace(query, before) {
  const face = await askJson(withQuery("api/cutoff/face", query, `coupling_as=${form.couplingAs.value}`));
  if (query !== state.query) return;
  state.title = face.title;
  document.title = `Cutoffs: ${face.title} – Softmode`;
  part("title").textContent = face.title;
  part("note").textContent = face.note;
  part("note").hidden = !face.note;
  part("member").textContent = face.member;
  part("hamiltonian").innerHTML = face.hamiltonian;
  part("values").replaceChildren(...face.values.map((value) => Object.assign(document.createElement("li"), { innerHTML: value })));
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

let zoomTimer = null;

// Zooming replaces the address, it pushes nothing: the picture is already on the screen.
function zoomed(range) {
  clearTimeout(zoomTimer);
  zoomTimer = setTimeout(async () => {
    const text = range === null ? "" : `${range[0]}:${range[1]}`;
    if (form.box("zoom").value === text) return;
    form.box("zoom").value = text;
    try {
      const answer = await post("api/cutoff/link", form.fields());
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

// -- start ------------------------------------------------------------------------------------------

showLink();
form.begin(boot.texts);
if (boot.error) form.problem(boot.error);
else compute();
