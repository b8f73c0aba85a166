// What the pages of a sheet share: progress, trouble, the words around the picture, zooming in the address.

import { duration } from "./format.js";
import { post } from "./net.js";

const ADDRESS_PAUSE = 300;
const PATIENCE = 150; // a quick answer is over before a bar could be read
const WORDS = { cancelled: "Cancelled", restarting: "The server is restarting", failed: "Failed" };

export const part = (id) => document.getElementById(id);

function lines(texts, tag = "p") {
  return texts.map((text) => Object.assign(document.createElement(tag), { textContent: text }));
}

// A word where there is no picture yet.
export function wait(plot, text = "Computing the first points…") {
  if (plot.figure || part("stage").querySelector(".waiting")) return;
  part("stage").append(Object.assign(document.createElement("p"), { className: "waiting", textContent: text }));
}

export function stopWaiting() {
  part("stage").querySelector(".waiting")?.remove();
}

export class Progress {
  // calls: cancel(), goOn(); words: what is counted, and how much of it is there at a halt
  constructor(calls, words = { counted: "points", halted: "points are there" }) {
    this.timer = null;
    this.words = words;
    part("cancel").addEventListener("click", () => calls.cancel());
    part("go-on").addEventListener("click", () => calls.goOn());
    part("reload-now").addEventListener("click", () => location.reload());
  }

  show(facts) {
    const active = facts.state === "queued" || facts.state === "running";
    part("bar").max = facts.total;
    part("bar").value = facts.done;
    const words = facts.notice ?? (facts.state === "queued" ? "waiting for a free processor" : duration(facts.seconds_left));
    part("progress-words").textContent = `${facts.done} of ${facts.total} ${this.words.counted}${words ? `, ${words}` : ""}`;
    part("cancel").hidden = !active;
    part("go-on").hidden = true;
    if (active) this.timer ??= setTimeout(() => { part("progress").hidden = false; }, PATIENCE);
  }

  hide() {
    clearTimeout(this.timer);
    this.timer = null;
    part("progress").hidden = true;
  }

  ended(facts) {
    this.hide();
    part("cancel").hidden = true;
    if (facts.state === "done") return; // the last picture is on its way
    part("stage").setAttribute("aria-busy", "false");
    stopWaiting();
    part("progress").hidden = false;
    part("progress-words").textContent = `${WORDS[facts.state] ?? facts.state}: ${facts.done} of ${facts.total} ${this.words.halted}.`;
    part("go-on").hidden = facts.state !== "cancelled";
  }

  // Something went wrong: said at its box where there is one, and above the picture.
  failed(problem, form) {
    const facts = problem.facts ?? { message: String(problem.message), field: null, allowed: null };
    this.hide();
    part("stage").setAttribute("aria-busy", "false");
    stopWaiting();
    const atField = facts.field && form.problem(facts);
    const told = [facts.message];
    if (!atField && facts.allowed !== null && facts.allowed !== undefined) told.push(`Allowed: ${facts.allowed}`);
    part("message").replaceChildren(...lines(told));
    part("message").hidden = false;
  }
}

export function showProvenance(made, id) {
  const when = made.computed_at ? `computed ${made.computed_at.replace("T", " ")}, ${made.seconds} s of processor time` : "still computing";
  part("provenance").textContent = `Softmode ${made.softmode}, solver ${made.solver.slice(0, 12)}, numpy ${made.numpy}, scipy ${made.scipy}; ${when}; result ${id.slice(0, 16)}`;
}

export function showLink(address, twin) {
  part("link").value = address;
  part("print-link").textContent = address;
  if (part("twin")) part("twin").href = twin;
}

export function showFace(face, title) {
  document.title = `${title} – Softmode`;
  part("title").textContent = face.title;
  part("note").textContent = face.note;
  part("note").hidden = !face.note;
  part("member").textContent = face.member;
  part("hamiltonian").innerHTML = face.hamiltonian;
  part("values").replaceChildren(...face.values.map((value) => Object.assign(document.createElement("li"), { innerHTML: value })));
}

// Zooming replaces the address, it pushes nothing: the picture is already on the screen.
export class ZoomKeeper {
  // calls: replaced(answer), failed(problem)
  constructor(form, path, calls) {
    this.form = form;
    this.path = path;
    this.calls = calls;
    this.timer = null;
  }

  zoomed(range) {
    clearTimeout(this.timer);
    this.timer = setTimeout(() => this.keep(range === null ? "" : `${range[0]}:${range[1]}`), ADDRESS_PAUSE);
  }

  async keep(text) {
    if (this.form.box("zoom").value === text) return;
    this.form.box("zoom").value = text;
    try {
      const answer = await post(this.path, this.form.fields());
      this.form.committed = this.form.snapshot();
      this.calls.replaced(answer);
    } catch (problem) {
      this.calls.failed(problem);
    }
  }
}
