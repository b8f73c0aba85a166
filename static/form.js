// The form: what is typed, what the sliders say, and where an error belongs.

const BESIDE = { splitting: "splitting", detuning: "splitting" };
const SUGGESTED = {
  spins: () => "5 10 20 40",
  coupling: (value) => spread(value || 1, [0.5, 1, 1.5]),
  splitting: (value) => spread(value || 1, [0.5, 1, 2]),
  mode: (value) => spread(value, [0.5, 1, 2]),
  detuning: (_, mode) => spread(mode, [-0.5, 0, 0.5]),
  ratio: () => "0 0.5 1",
  bias: (_, mode) => spread(mode, [0, 0.1, 0.3]),
  "coupling-over-critical": () => "0.5 1 1.5",
};

function spread(value, factors) {
  return factors.map((factor) => String(Number((value * factor).toPrecision(6)))).join(" ");
}

// "0,5 1,5" and "5, 10, 20" both mean what they look like; the link holds points and commas.
export function familyText(name, typed) {
  const pieces = typed.trim().split(/[;\s]+/).map((piece) => piece.replace(/^,|,$/g, "")).filter(Boolean);
  const values = pieces.length === 1 ? pieces[0].split(",") : pieces.map((piece) => piece.replace(",", "."));
  return `${name}:${values.join(",").replace(/−/g, "-")}`;
}

export class Form {
  // calls: commit(), drag()
  constructor(form, calls) {
    this.form = form;
    this.calls = calls;
    this.splittingAs = document.getElementById("splitting-as");
    this.couplingAs = document.getElementById("coupling-as");
    this.texts = {};
    form.addEventListener("submit", (event) => event.preventDefault());
    form.addEventListener("input", (event) => this.input(event));
    form.addEventListener("change", (event) => this.changed(event));
    this.committed = this.snapshot();
  }

  box(name) {
    return this.form.elements.namedItem(name);
  }

  // -- reading ------------------------------------------------------------------------------------

  fields(more = {}) {
    const fields = {};
    for (const name of ["spins", "mode", "ratio", "bias", "along", "from", "to", "points", "levels", "tol", "need", "tail", "unit", "frame", "energies", "bosons", "overlay", "title", "note", "at", "zoom"]) {
      fields[name] = this.box(name).value;
    }
    fields[this.splittingAs.value] = this.box("splitting").value;
    fields.coupling = this.box("coupling").value;
    fields.coupling_as = this.couplingAs.value;
    // a map has no family of curves
    const family = this.box("each_name")?.value;
    if (family) fields.each = familyText(family, this.box("each_values").value);
    return { ...fields, ...more };
  }

  // Every box as it stands, to tell what has changed since.
  snapshot() {
    const boxes = [...this.form.elements].filter((box) => box.name || box === this.splittingAs);
    return JSON.stringify(Object.fromEntries(boxes.map((box) => [box.name || "splitting_as", box.value])));
  }

  get isNew() {
    return this.snapshot() !== this.committed;
  }

  // -- events -------------------------------------------------------------------------------------

  input(event) {
    const name = event.target.dataset.slider;
    if (!name) return;
    this.box(name).value = this.fromSlider(event.target, name);
    event.target.setAttribute("aria-valuetext", this.box(name).value);
    this.calls.drag();
  }

  fromSlider(slider, name) {
    const logarithmic = slider.closest(".knob").dataset.scale === "logarithmic";
    const value = logarithmic ? 10 ** Number(slider.value) : Number(slider.value);
    if (name === "spins") return String(Math.round(value));
    return String(Number(value.toPrecision(logarithmic ? 3 : 6)));
  }

  changed(event) {
    const target = event.target;
    if (target === this.couplingAs) {
      this.calls.reword();
      return;
    }
    if (target === this.splittingAs && target.value in this.texts) this.box("splitting").value = this.texts[target.value];
    if (target.name === "along") this.clear("from", "to", "points", "at", "zoom");
    if (target.name === "from" || target.name === "to") this.clear("zoom");
    if (target.name === "each_name") {
      const suggest = SUGGESTED[target.value];
      const number = (name) => Number(this.box(name)?.value.replace(",", ".")) || 0;
      const own = ["detuning", "coupling-over-critical"].includes(target.value) ? 0 : number(target.value || "spins");
      this.box("each_values").value = suggest ? suggest(own, number("mode") || 1) : "";
    }
    this.calls.commit();
  }

  clear(...names) {
    for (const name of names) this.box(name).value = "";
  }

  // -- writing ------------------------------------------------------------------------------------

  // `before` is the snapshot that was sent: boxes changed since then are left alone.
  show(face, before = null) {
    const sent = before === null ? null : JSON.parse(before);
    let newer = false;
    const put = (name, text) => {
      const box = this.box(name);
      if (!box) return;
      if (sent !== null && box.value !== sent[name]) newer = true;
      else if (box.value !== text) box.value = text;
    };
    this.texts = face.texts;
    this.splittingAs.value = face.splitting_as;
    for (const [name, text] of Object.entries(face.texts)) {
      if (name !== "splitting" && name !== "detuning") put(name, text);
    }
    for (const knob of face.knobs) this.showKnob(knob, put);
    for (const name of ["from", "to", "points", "title"]) this.box(name).placeholder = face.placeholders[name];
    for (const name of ["from", "to"]) document.getElementById(`hint-${name}`).textContent = face.axis_unit;
    for (const select of [this.box("along"), this.box("each_name")].filter(Boolean)) {
      for (const [value, label] of face.swept_names) select.querySelector(`option[value="${value}"]`).textContent = label;
    }
    const family = document.querySelector('[data-field="each_values"]');
    if (family) family.hidden = !this.box("each_name").value;
    if (!newer) this.committed = this.snapshot();
  }

  showKnob(knob, put) {
    const block = this.form.querySelector(`[data-knob="${knob.name}"]`);
    block.hidden = !knob.fixed;
    block.dataset.scale = knob.scale;
    block.querySelector(".words").textContent = knob.words;
    block.querySelector(".symbol").textContent = knob.symbol;
    block.querySelector(".unit").textContent = knob.unit;
    put(knob.name, knob.text);
    const slider = block.querySelector(".slider");
    slider.min = knob.low;
    slider.max = knob.high;
    slider.step = knob.step;
    slider.value = knob.place;
    slider.setAttribute("aria-label", `${knob.words}, slider`);
    slider.setAttribute("aria-valuetext", `${knob.text} ${knob.unit}`);
  }

  // -- errors -------------------------------------------------------------------------------------

  clearProblems() {
    for (const line of this.form.querySelectorAll(".problem")) line.hidden = true;
    for (const box of this.form.querySelectorAll("[aria-invalid]")) box.removeAttribute("aria-invalid");
  }

  // Returns whether the form has a place for this error.
  problem(facts) {
    this.clearProblems();
    const name = facts.field === "each" ? "each" : BESIDE[facts.field] ?? facts.field;
    const line = name ? document.getElementById(`problem-${name}`) : null;
    if (!line) return false;
    const allowed = facts.allowed ? ` Allowed: ${facts.allowed}.` : "";
    const given = facts.value !== null && facts.value !== undefined ? ` Given: ${typeof facts.value === "object" ? JSON.stringify(facts.value) : facts.value}.` : "";
    line.textContent = `${facts.message.replace(/\.?$/, ".")}${given}${allowed}`;
    line.hidden = false;
    const box = this.box(name === "each" ? "each_values" : name);
    box?.setAttribute("aria-invalid", "true");
    const group = line.closest("details");
    if (group) group.open = true;
    const knob = line.closest(".knob");
    if (knob) knob.hidden = false;
    return true;
  }
}
