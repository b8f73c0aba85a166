// The numbers of the cutoff desk: what each quantity needs, margins, sizes, and the values at the cursor.

import { bound, plain, supported } from "./format.js";
import { element, unitOf } from "./values.js";

const part = (id) => document.getElementById(id);
const SIZES = { sparse: "sparse matrix", dense: "dense matrix", density_matrix: "density matrix" };
const STATE_TITLES = { lowest: "Ground state there", collective: "Equilibrium there", distinguishable: "Equilibrium there" };
const VALUE_NAMES = {
  energy: "energy",
  gap: "gap",
  boson_number: "boson number",
  order_parameter: "order parameter",
  inversion: "inversion",
  at_start: "largest n needed by the start itself",
  mean_bosons_most: "largest mean boson number met",
  critical_temperature: "critical temperature (N → ∞)",
};

function error(value) {
  if (value === null || value === undefined) return "–";
  return value === 0 ? "0" : bound(value);
}

function fill(table, head, rows) {
  const line = element("tr");
  for (const [column, text] of head.entries()) {
    const wordy = column === 0 || typeof rows[0]?.[column] === "object";
    const cell = element("th", wordy ? "words" : "", text);
    cell.scope = "col";
    line.append(cell);
  }
  const lines = rows.map(([name, ...cells]) => {
    const made = element("tr");
    const first = element("th", "", name);
    first.scope = "row";
    made.append(first);
    for (const cell of cells) {
      const words = typeof cell === "object";
      const data = element("td", words ? `words ${cell.mark ?? ""}` : "", words ? cell.words : cell);
      made.append(data);
    }
    return made;
  });
  table.replaceChildren(line, ...lines);
}

export class DeskTables {
  constructor() {
    this.data = null;
    this.onStep = () => {};
    this.onPin = () => {};
  }

  feed(picture) {
    this.data = picture.readout;
    this.words = picture.words;
    this.quantities();
    this.reverse();
    this.sizes(picture.sizes);
  }

  points() {
    const { axis, covering } = this.data;
    const width = axis.values.length;
    return axis.values.map((x, point) => [x, covering.some((value, number) => number % width === point && value !== null)]);
  }

  place(point) {
    return `${this.data.symbol} = ${plain(this.data.axis.values[point])}${unitOf(this.data.unit)}`;
  }

  describe(point) {
    if (!this.data?.x || point === null) return "no values yet";
    const parts = this.rows(point).map(([name, needed]) => `${name}: n = ${needed}`);
    return `${this.place(point)}; ${parts.join("; ")}`;
  }

  // -- tables under the plot --------------------------------------------------------------------------

  quantities() {
    const rows = this.words.per_quantity.map((line) => {
      if (line.cutoff === null) return [line.name, line.allowed, "–", "–", { words: "" }, { words: line.status }];
      return [line.name, line.allowed, plain(line.cutoff), plain(line.cutoff + 1), { words: line.place }, { words: line.status }];
    });
    fill(part("quantities"), ["quantity", "error allowed", "largest n", "levels", "needed most at", "claim"], rows);
    this.valuesThere();
    part("more-words").textContent = this.words.more.join(" ");
    const { deciding_point: address, rows: mapped } = this.data;
    part("open-point").hidden = !address;
    if (address) part("open-point").href = address;
    part("map-rows").hidden = !mapped;
    if (mapped) fill(part("rows-table"), ["needed most at", "largest n", "levels"], mapped.map((row) => [row.place, plain(row.cutoff), plain(row.cutoff + 1)]));
  }

  // What the state is like at the point that decides.
  valuesThere() {
    const { summary, values, ensemble } = this.data;
    part("values-there").textContent = "";
    if (!values || summary.deciding === null) return;
    const parts = Object.entries(values)
      .filter(([key, column]) => key in VALUE_NAMES && column[summary.deciding.point] !== null)
      .map(([key, column]) => `${VALUE_NAMES[key]} ${supported(column[summary.deciding.point], values[`${key}_error`]?.[summary.deciding.point] ?? 0, 8)}`);
    part("values-there").textContent = `${STATE_TITLES[ensemble]}: ${parts.join(", ")}.`;
  }

  reverse() {
    if (this.words.stated === null) return;
    const rows = this.words.stated.quantities.map((line) => {
      const short = line.good !== "everywhere" && line.good !== "not judged";
      // without an error there is a place only where the cutoff does not hold the levels asked for
      const worst = line.worst === null && line.at ? "too few levels" : error(line.worst);
      return [line.name, { words: line.good, mark: short ? "short" : "" }, worst, { words: line.at }, error(line.allowed)];
    });
    fill(part("reverse-table"), ["quantity", "good enough", "largest error", "at", "allowed"], rows);
  }

  sizes(sizes) {
    const titles = { covering: "covering", stated: "stated" };
    const rows = sizes.map((size) => [
      `n = 0..${size.cutoff} (${titles[size.for]})`,
      { words: size.treatment },
      size.dimension,
      size.nonzeros,
      ...Object.keys(SIZES).map((key) => size[key]),
    ]);
    fill(part("sizes"), ["cutoff", "treatment", "dimension", "nonzeros", ...Object.values(SIZES)], rows);
  }

  // -- margins ----------------------------------------------------------------------------------------

  clearMargins(words) {
    part("margins").replaceChildren();
    part("margins-place").textContent = "";
    part("plateaus").hidden = true;
    part("margins-waiting").textContent = words;
  }

  margins(found) {
    part("margins-waiting").textContent = "";
    part("margins-place").textContent = `errors at the deciding point, ${found.place}`;
    const extra = (cutoff) => (cutoff === found.cutoff ? "covering" : `+${cutoff - found.cutoff}`);
    const head = ["quantity", "allowed", ...found.cutoffs.map((cutoff) => `n = 0..${cutoff} (${extra(cutoff)})`)];
    const rows = Object.entries(found.error).map(([key, errors]) => [found.names[key], error(found.allowed[key]), ...errors.map(error)]);
    fill(part("margins"), head, rows);
    const lines = found.plateaus.map((one) => {
      const name = (found.names[one.quantity] ?? "Ground energy").toLowerCase();
      return `From n = ${one.from} to n = ${one.to} the ${name} stays near ${plain(one.value, 8)} and looks settled; its true value is ${plain(one.truth, 8)}.`;
    });
    part("plateaus").hidden = lines.length === 0;
    part("plateaus").replaceChildren(
      ...(lines.length ? [element("p", "plateau-head", "⚠ False plateaus: a calculation that stops here looks converged and is wrong")] : []),
      ...lines.map((text) => element("p", "", text)),
    );
  }

  // -- strip at the cursor ----------------------------------------------------------------------------

  rows(point) {
    const { quantities, curves, needed, status, covering, deciding, stated, axis } = this.data;
    if (curves[0]) {
      return curves.map((label, row) => {
        const at = row * axis.values.length + point;
        const name = quantities.find((one) => one.key === deciding[at])?.name ?? "–";
        const enough = stated ? [stated.enough[at] === null ? "–" : stated.enough[at] ? "enough" : "not enough"] : [];
        return [label, plain(covering[at]), name, ...enough];
      });
    }
    return quantities.map(({ key, name, allowed }) => {
      const own = [plain(needed[key][point]), status[key][point] ?? "–", `${error(this.data.error[key][point])} of ${error(allowed)}`];
      if (!stated) return [name, ...own];
      const good = stated.good[key][point];
      return [name, ...own, error(stated.error[key][point]), good === null || good === undefined ? "–" : good ? "enough" : "not enough"];
    });
  }

  strip(point, pinned) {
    if (!this.data?.x || point === null) return;
    const strip = part("strip");
    strip.hidden = false;
    if (!this.head) this.makeHead(strip);
    this.where.textContent = this.place(point);
    this.pin.textContent = pinned ? "Unpin" : "Pin here";
    const { stated, curves } = this.data;
    const [covering, note] = [this.data.covering[point], this.data.notes.find((one) => one.point === point)?.note ?? ""];
    this.state.textContent = curves[0] ? "" : covering === null ? note || "not computed" : `largest n needed here: ${covering}`;
    const titles = curves[0] ? ["curve", "largest n", "decided by"] : ["quantity", "largest n", "claim", "error then"];
    const more = stated ? (curves[0] ? [`n = 0..${stated.cutoff}`] : [`error at n = 0..${stated.cutoff}`, ""]) : [];
    fill(this.table, [...titles, ...more], this.rows(point));
  }

  makeHead(strip) {
    this.head = element("div", "strip-head");
    this.where = element("span", "place");
    this.state = element("span", "status");
    const [left, right] = [element("button", "", "◀"), element("button", "", "▶")];
    this.pin = element("button");
    left.setAttribute("aria-label", "Cursor one point to the left");
    right.setAttribute("aria-label", "Cursor one point to the right");
    for (const button of [left, right, this.pin]) button.type = "button";
    left.addEventListener("click", () => this.onStep(-1));
    right.addEventListener("click", () => this.onStep(1));
    this.pin.addEventListener("click", () => this.onPin());
    this.head.append(left, this.where, right, this.pin, this.state);
    const box = element("div", "scroller");
    this.table = element("table", "values");
    box.append(this.table);
    box.tabIndex = 0;
    box.setAttribute("role", "group");
    box.setAttribute("aria-label", "Cutoffs of each quantity");
    strip.append(this.head, box);
  }
}
