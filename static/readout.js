// The value strip under the cursor, the full list of values, and the table of the printed run sheet.

import { plain } from "./format.js";
import { cellOf, element, Values } from "./values.js";

const GLYPHS = ["●", "■", "◆", "▲", "▼", "★", "◀", "▶"];
const PRINTED_ROWS = 9;
const PRINTED_DIGITS = 7;
const TABLE_DIGITS = 9;

export class Readout extends Values {
  constructor(strip, more, moreTable, runSheet) {
    super();
    this.strip = strip;
    this.more = more;
    this.moreTable = moreTable;
    this.runSheet = runSheet;
    this.buttons = null;
    this.point = null;
    more.querySelector("details").addEventListener("toggle", () => this.writeMore());
  }

  feed(data) {
    this.data = data;
    this.writeRunSheet();
  }

  points() {
    const { axis, curves } = this.data;
    return axis.values.map((x, point) => [x, curves.some((curve) => curve.series.energy[point] !== null)]);
  }

  // One line for screen readers.
  describe(point) {
    if (!this.data || point === null) return "no values yet";
    const parts = this.data.curves.filter((curve) => curve.series.energy[point]).map((curve) => {
      const level = this.level(curve, point, 0);
      const bosons = this.number(curve, point, this.field("boson_number"));
      return `${curve.label ? `${curve.label}: ` : ""}E0 ${level.value} ${level.bound}, boson number ${bosons.value} ${bosons.bound}`;
    });
    return `${this.place(point)}; ${parts.join("; ")}`;
  }

  // -- strip --------------------------------------------------------------------------------------

  show(point, pinned) {
    if (!this.data || point === null) return;
    this.point = point;
    const first = this.strip.hidden;
    this.strip.hidden = false;
    this.more.hidden = false;
    this.writeHead(point, pinned);
    const old = this.strip.querySelector(".body");
    const body = this.data.curves.length > 1 || this.data.curves[0].label ? this.table(point) : this.cells(point);
    body.classList.add("body");
    if (old) old.replaceWith(body);
    else this.strip.append(body);
    this.writeMore();
    if (first) window.dispatchEvent(new Event("resize"));
  }

  writeHead(point, pinned) {
    if (!this.head) {
      this.head = element("div", "strip-head");
      this.where = element("span", "place");
      this.state = element("span", "status");
      this.buttons = { left: element("button", "", "◀"), right: element("button", "", "▶"), pin: element("button"), open: element("button", "", "Open this point") };
      this.buttons.left.setAttribute("aria-label", "Cursor one point to the left");
      this.buttons.right.setAttribute("aria-label", "Cursor one point to the right");
      for (const button of Object.values(this.buttons)) button.type = "button";
      this.head.append(this.buttons.left, this.where, this.buttons.right, this.buttons.pin, this.buttons.open, this.state);
      this.strip.append(this.head);
      this.buttons.left.addEventListener("click", () => this.onStep(-1));
      this.buttons.right.addEventListener("click", () => this.onStep(1));
      this.buttons.pin.addEventListener("click", () => this.onPin());
      this.buttons.open.addEventListener("click", () => this.onOpen());
    }
    this.where.textContent = this.place(point);
    this.buttons.pin.textContent = pinned ? "Unpin" : "Pin here";
    const open = this.data.curves.filter((curve) => curve.series.meets_tolerance[point] === false);
    this.state.textContent = open.length
      ? `⚠ not yet within tol${open.length > 1 || open[0].label ? `: ${open.map((curve) => curve.label).join(", ")}` : `. ${this.reason(open[0], point)}`}`
      : "every level within tol";
    this.state.classList.toggle("open", open.length > 0);
  }

  cells(point) {
    const curve = this.data.curves[0];
    const list = element("dl", "cells");
    if (!curve.series.energy[point]) return list;
    const cell = (...parts) => list.append(cellOf(...parts));
    const ground = this.level(curve, point, 0);
    cell(`E₀ ground level, ${ground.status}`, ground.value, ground.bound);
    for (const field of this.data.fields.filter((one) => one.foremost)) {
      const shown = this.number(curve, point, field);
      cell(`${field.title} ${field.symbol}`, shown.value, shown.bound, field.key === "gap_any");
    }
    const { series } = curve;
    cell("Cutoff needed", plain(series.cutoff_needed[point]), "");
    cell("Cutoff used", plain(series.cutoff_used[point]), `${series.basis[point]} basis`, true);
    return list;
  }

  table(point) {
    const box = element("div", "scroller");
    const table = element("table", "values");
    const fields = this.data.fields.filter((one) => one.foremost);
    const head = element("tr");
    const titles = ["curve", "E₀", ...fields.map((field) => `${field.title} ${field.symbol}`), "cutoff needed", "used", "basis"];
    for (const title of titles) {
      const cell = element("th", "", title);
      cell.scope = "col";
      head.append(cell);
    }
    table.append(head);
    this.data.curves.forEach((curve, number) => {
      if (!curve.series.energy[point]) return;
      const row = element("tr");
      const name = element("th");
      name.scope = "row";
      name.append(element("span", `swatch token-${curve.token}`, GLYPHS[number]), curve.label);
      row.append(name, this.boundCell(this.level(curve, point, 0, TABLE_DIGITS)));
      for (const field of fields) row.append(this.boundCell(this.number(curve, point, field, TABLE_DIGITS)));
      const { series } = curve;
      for (const text of [plain(series.cutoff_needed[point]), plain(series.cutoff_used[point]), series.basis[point]]) row.append(element("td", "", text));
      table.append(row);
    });
    box.append(table);
    box.tabIndex = 0;
    box.setAttribute("role", "group");
    box.setAttribute("aria-label", "Values of each curve");
    return box;
  }

  boundCell(shown) {
    const cell = element("td");
    cell.append(element("span", "value", shown.value), " ", element("span", "bound", shown.bound));
    return cell;
  }

  // -- everything ---------------------------------------------------------------------------------

  writeMore() {
    if (!this.more.querySelector("details").open || !this.data || this.point === null) return;
    const point = this.point;
    const box = element("div", "scroller");
    for (const curve of this.data.curves) {
      if (!curve.series.energy[point]) continue;
      const table = element("table", "values");
      table.append(this.caption(curve));
      const add = (...texts) => {
        const row = element("tr");
        texts.forEach((text, column) => row.append(element("td", column === 0 || column === 3 ? "words" : "", text)));
        table.append(row);
      };
      curve.series.energy[point].forEach((_, rank) => {
        const shown = this.level(curve, point, rank);
        add(`E${rank}`, shown.value, shown.bound, shown.status);
      });
      for (const field of this.data.fields) {
        const shown = this.number(curve, point, field);
        add(`${field.title} ${field.symbol}`, shown.value, shown.bound, "");
      }
      add("Cutoff needed", plain(curve.series.cutoff_needed[point]), "", "");
      add("Cutoff used", plain(curve.series.cutoff_used[point]), "", `${curve.series.basis[point]} basis`);
      box.append(table);
      const why = this.reason(curve, point);
      if (why) box.append(element("p", "hint", why));
    }
    this.moreTable.replaceChildren(box);
  }

  caption(curve) {
    return element("caption", "hint", curve.label ? `${curve.label}, ${this.place(this.point)}` : this.place(this.point));
  }

  // -- print --------------------------------------------------------------------------------------

  writeRunSheet() {
    const table = element("table", "values");
    const fields = ["gap", "boson_number", "order_parameter", "inversion"].map((key) => this.field(key) ?? this.field("gap_any"));
    const head = element("tr");
    const family = this.data.curves.some((curve) => curve.label);
    const headed = (title, unit) => (unit ? `${title} (${unit})` : title);
    const titles = [headed(this.data.axis.symbol, this.data.axis.unit), ...(family ? ["curve"] : []), headed("E₀", this.data.energy_unit), ...fields.map((field) => headed(field.title, field.unit)), "Cutoff needed"];
    for (const title of titles) head.append(element("th", "", title));
    table.append(head);
    for (const point of this.printedPoints()) {
      for (const curve of this.data.curves) {
        if (!curve.series.energy[point]) continue;
        const row = element("tr");
        row.append(element("td", "", plain(this.data.axis.values[point], 6)));
        if (family) row.append(element("td", "words", curve.label));
        row.append(this.boundCell(this.level(curve, point, 0, PRINTED_DIGITS, "")));
        for (const field of fields) row.append(this.boundCell(this.number(curve, point, field, PRINTED_DIGITS, "")));
        row.append(element("td", "", plain(curve.series.cutoff_needed[point])));
        table.append(row);
      }
    }
    this.runSheet.replaceChildren(element("h2", "", "Key numbers"), table);
  }

  printedPoints() {
    const known = this.points().map(([x, has], point) => [x, has, point]).filter(([, has]) => has);
    if (!known.length) return [];
    const rows = this.data.curves.length > 1 ? 4 : PRINTED_ROWS;
    const chosen = new Set();
    for (let row = 0; row < rows; row += 1) chosen.add(known[Math.round((row * (known.length - 1)) / (rows - 1))][2]);
    if (this.data.pinned !== null) {
      const at = this.data.pinned;
      chosen.add(known.reduce((best, one) => (Math.abs(one[0] - at) < Math.abs(best[0] - at) ? one : best))[2]);
    }
    return [...chosen].sort((a, b) => a - b);
  }
}
