// The toolbar: link, files, script, print.

import { ask, Problem, withQuery } from "./net.js";

// Works without navigator.clipboard, which browsers withhold from plain-HTTP addresses.
export async function copyText(text) {
  if (navigator.clipboard && window.isSecureContext) {
    try {
      await navigator.clipboard.writeText(text);
      return true;
    } catch {
      // fall through to the old way
    }
  }
  const area = document.createElement("textarea");
  area.value = text;
  area.setAttribute("readonly", "");
  area.className = "skip";
  const host = document.querySelector("dialog[open]") ?? document.body;
  host.append(area);
  const focused = document.activeElement;
  area.select();
  let copied = false;
  try {
    copied = document.execCommand("copy");
  } catch {
    copied = false;
  }
  area.remove();
  focused?.focus();
  return copied;
}

export function save(blob, name) {
  const link = document.createElement("a");
  link.href = URL.createObjectURL(blob);
  link.download = name;
  document.body.append(link);
  link.click();
  link.remove();
  setTimeout(() => URL.revokeObjectURL(link.href), 10_000);
}

export class Share {
  // now() returns {query, href, id, title}; `twin` is the address of the page's JSON, its tables lie beside it
  constructor(plot, now, twin = "api/sweep", name = "softmode") {
    this.plot = plot;
    this.now = now;
    this.prefix = name;
    this.said = document.getElementById("said");
    // a page has the buttons that make sense on it
    const on = (id, action) => document.getElementById(id)?.addEventListener("click", () => this.attempt(action));
    on("copy-link", () => this.copyLink());
    on("save-csv", () => this.file(`${twin}.csv`, "csv"));
    on("save-sizes", () => this.file(`${twin}/sizes.csv`, "csv", "-sizes"));
    on("save-json", () => this.file(twin, "json"));
    on("save-npz", () => this.file(`${twin}.npz`, "npz"));
    on("save-png", () => this.image("png"));
    on("save-svg", () => this.image("svg"));
    on("show-python", () => this.python());
    on("print", () => window.print());
    on("reset-zoom", () => this.plot.resetZoom());
    this.dialog = document.getElementById("python");
    if (this.dialog) this.wirePython();
    const link = document.getElementById("link");
    link.addEventListener("focus", () => link.select());
  }

  wirePython() {
    document.getElementById("python-close").addEventListener("click", () => this.dialog.close());
    document.getElementById("python-copy").addEventListener("click", async () => {
      const copied = await copyText(document.getElementById("python-code").textContent);
      document.getElementById("python-said").textContent = copied ? "Copied." : "Select the text and copy it by hand.";
    });
  }

  say(words) {
    this.said.textContent = words;
    clearTimeout(this.silence);
    this.silence = setTimeout(() => { this.said.textContent = ""; }, 6000);
  }

  async attempt(action) {
    try {
      await action();
    } catch (problem) {
      if (!(problem instanceof Problem)) throw problem;
      this.say(problem.message);
    }
  }

  async copyLink() {
    const copied = await copyText(this.now().href);
    if (!copied) document.getElementById("link").select();
    this.say(copied ? "Link copied." : "Select the link and copy it by hand.");
  }

  async file(address, kind, what = "") {
    this.say("Fetching the numbers…");
    const answer = await ask(withQuery(address, this.now().query));
    if (answer.status === 202) {
      const facts = await answer.json();
      this.say(`Still computing, ${facts.done} of ${facts.total} points; try again when all are there.`);
      return;
    }
    save(await answer.blob(), this.name(kind, what));
    this.say(`${kind.toUpperCase()} saved.`);
  }

  name(kind, what = "") {
    return `${this.prefix}${what}-${(this.now().id ?? "sweep").slice(0, 12)}.${kind}`;
  }

  async image(kind) {
    const { title, href } = this.now();
    if (!this.plot.figure) {
      this.say("There is no picture yet.");
      return;
    }
    const address = await this.plot.image(kind, escapeText(title), escapeText(`Softmode  ${href}`).slice(0, 190));
    save(bytesOf(address, kind), this.name(kind));
    this.say(`${kind.toUpperCase()} saved.`);
  }

  async python() {
    const answer = await ask(withQuery("api/sweep.py", this.now().query));
    document.getElementById("python-code").textContent = await answer.text();
    document.getElementById("python-said").textContent = "";
    this.dialog.showModal();
  }
}

function escapeText(text) {
  return text.replace(/&/g, "&amp;").replace(/</g, "&lt;").replace(/>/g, "&gt;");
}

// A data address turned into bytes here: fetching it would need a wider security policy.
function bytesOf(address, kind) {
  const [head, body] = [address.slice(0, address.indexOf(",")), address.slice(address.indexOf(",") + 1)];
  const type = kind === "png" ? "image/png" : "image/svg+xml";
  const bytes = head.endsWith(";base64") ? Uint8Array.from(atob(body), (letter) => letter.charCodeAt(0)) : new TextEncoder().encode(decodeURIComponent(body));
  return new Blob([bytes], { type });
}
