// The form of a map: that of a sweep without a family, and boxes of its own.

import { familyText, Form } from "./form.js";

const OWN = ["across", "low", "high", "rows", "every", "show", "scale"];
const RANGES = ["from", "to", "points", "low", "high", "rows"];

// "0,5 : 2" means what it looks like; the link holds points
function shadesText(typed) {
  return typed.split(":").map((piece) => piece.trim().replace(",", ".").replace(/−/g, "-")).join(":");
}

export class MapForm extends Form {
  constructor(form, calls) {
    super(form, calls);
    // before the form itself hears of a change
    form.addEventListener("change", (event) => this.prepare(event.target), { capture: true });
  }

  fields(more = {}) {
    const fields = super.fields();
    for (const name of OWN) fields[name] = this.box(name).value;
    fields.shades = shadesText(this.box("shades").value);
    const contours = this.box("contours").value.trim();
    fields.contours = contours ? familyText("", contours).slice(1) : "";
    return { ...fields, ...more };
  }

  // What one change means for other boxes, before it is committed.
  prepare(target) {
    if (target.name === "across") this.clear("low", "high", "rows");
    // other numbers, another scale
    if (["show", "bosons"].includes(target.name)) this.clear("shades", "contours");
    if (target.name === "scale") this.clear("shades");
  }

  show(face, before = null) {
    super.show(face, before);
    for (const name of RANGES) this.box(name).placeholder = face.placeholders[name];
    const across = this.box("across");
    for (const [value, label] of face.swept_names) across.querySelector(`option[value="${value}"]`).textContent = label;
  }
}
