// The form of the cutoff desk: that of a sweep, and boxes of its own.

import { Form } from "./form.js";

const OWN = ["across", "low", "high", "rows", "asked", "need-gap", "need-bosons", "need-order", "stated", "ensemble", "start", "start-quanta", "start-periods"];
const ONLY_LOWEST = ["energies", "gap"];

export class DeskForm extends Form {
  constructor(form, calls) {
    super(form, calls);
    // before the form itself hears of a change
    form.addEventListener("change", (event) => this.prepare(event.target), { capture: true });
  }

  begin(texts) {
    this.texts = texts;
    document.querySelector('[data-field="each_values"]').hidden = !this.box("each_name").value;
    this.arrange();
    for (const id of ["group-map", "group-heat", "group-start"]) {
      const first = document.getElementById(id).querySelector("select");
      if (first.value !== first.options[0].value) document.getElementById(id).open = true;
    }
  }

  get pinned() {
    const text = this.box("at").value;
    return text === "" ? null : Number(text);
  }

  get heated() {
    return this.box("ensemble").value !== "lowest";
  }

  fields(more = {}) {
    const fields = super.fields();
    for (const name of OWN) fields[name] = this.box(name).value;
    // boxes that are out of sight ask nothing
    if (!fields.across) for (const name of ["low", "high", "rows"]) delete fields[name];
    if (fields.start === "none") for (const name of ["start-quanta", "start-periods"]) delete fields[name];
    if (this.heated) fields[this.box("heat_as").value] = this.box("temperature").value;
    return { ...fields, ...more };
  }

  // What one change means for other boxes, before it is committed.
  prepare(target) {
    if (target.dataset.asked) {
      const chosen = [...this.form.querySelectorAll("[data-asked]")].filter((box) => box.checked && !box.disabled);
      // nothing chosen is an error, not the default
      this.box("asked").value = chosen.map((box) => box.dataset.asked).join(",") || ",";
    }
    if (target.name === "across") this.clear("low", "high", "rows");
    if (target.name === "across" && target.value) {
      this.box("each_name").value = "";
      this.box("each_values").value = "";
    }
    if (target.name === "each_name" && target.value) {
      this.box("across").value = "";
      this.clear("low", "high", "rows");
    }
    if (target.name === "ensemble") {
      this.clear("asked");
      if (this.heated && !this.box("temperature").value) this.box("temperature").value = "1";
    }
    this.arrange();
  }

  // Shows the boxes that mean something now.
  arrange() {
    const hide = (name, hidden) => { this.form.querySelector(`[data-field="${name}"]`).hidden = hidden; };
    for (const name of ["low", "high", "rows"]) hide(name, !this.box("across").value);
    document.getElementById("heat").hidden = !this.heated;
    document.getElementById("start-more").hidden = this.box("start").value === "none";
    hide("levels", this.heated);
    const named = this.box("asked").value;
    for (const box of this.form.querySelectorAll("[data-asked]")) {
      const name = box.dataset.asked;
      const unjudged = this.heated && ONLY_LOWEST.includes(name);
      box.disabled = unjudged;
      box.checked = !unjudged && (!named || named.split(",").includes(name));
    }
  }

  show(face, before = null) {
    const { quanta, ...texts } = face.texts;
    texts.heat_as = texts.temperature || !quanta ? "temperature" : "quanta";
    if (!texts.temperature && !quanta) texts.heat_as = this.box("heat_as").value;
    texts.temperature = texts.temperature || quanta || this.box("temperature").value;
    super.show({ ...face, texts }, before);
    for (const name of ["low", "high", "rows"]) this.box(name).placeholder = face.placeholders[name];
    const across = this.box("across");
    for (const [value, label] of face.swept_names) across.querySelector(`option[value="${value}"]`).textContent = label;
    this.arrange();
  }

  problem(facts) {
    const found = super.problem(facts);
    if (facts.field === "quanta") this.box("temperature").setAttribute("aria-invalid", "true");
    return found;
  }
}
