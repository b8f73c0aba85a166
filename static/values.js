// The numbers behind a picture, written with units and bounds.

import { bound, plain, supported } from "./format.js";

const PARITY = { 1: "even", "-1": "odd", 0: "no parity" };

export function element(tag, className, text) {
  const made = document.createElement(tag);
  if (className) made.className = className;
  if (text !== undefined) made.textContent = text;
  return made;
}

// One entry of a strip of values; `second` ones give way on narrow screens.
export function cellOf(title, value, words, second) {
  const box = element("div", second ? "cell second-row" : "cell");
  const text = element("dd");
  text.append(element("span", "value", value), " ", element("span", "bound", words));
  box.append(element("dt", "", title), text);
  return box;
}

export function unitOf(unit) {
  return unit ? ` ${unit}` : "";
}

export class Values {
  constructor() {
    this.data = null;
  }

  place(point) {
    const { axis } = this.data;
    return `${axis.symbol} = ${plain(axis.values[point])}${unitOf(axis.unit)}`;
  }

  field(key) {
    return this.data.fields.find((one) => one.key === key);
  }

  level(curve, point, rank, digits, unit = this.data.energy_unit) {
    const { series } = curve;
    const upper = series.energy[point][rank];
    const lower = series.energy_lower[point]?.[rank] ?? null;
    const width = lower === null ? null : upper - lower;
    const status = series.energy_status[point][rank];
    const width_words = width === null ? "no lower bound" : width > 0 ? `+0 −${bound(width)}` : "exact";
    return {
      value: `${supported(upper, width, digits)}${unitOf(unit)}`,
      bound: width_words,
      status: `${PARITY[series.parity[point][rank]]}, ${status}`,
    };
  }

  // Distance of two levels of a point, with a bound that covers both.
  distance(curve, point, from, to) {
    const { energy, energy_lower } = curve.series;
    if (energy[point][to] === undefined) return { value: "–", bound: "" };
    const [above, below] = [energy[point], energy_lower[point]];
    const apart = Math.max(0, above[to] - above[from]);
    const most = Math.max(above[to] - below[from], above[from] - below[to]);
    const error = Math.max(most - apart, apart - Math.max(0, below[to] - above[from]));
    const unit = unitOf(this.data.energy_unit);
    // what is not told from zero is given by its bound alone
    if (apart <= error) return { value: `≤ ${bound(most)}${unit}`, bound: "" };
    return { value: `${supported(apart, error)}${unit}`, bound: `± ${bound(error)}` };
  }

  number(curve, point, field, digits, unit = field.unit) {
    const value = curve.series[field.key][point];
    const error = field.error ? curve.series[field.error]?.[point] ?? null : null;
    if (value === null) return { value: "–", bound: this.reason(curve, point) };
    return {
      value: `${supported(value, error, digits)}${unitOf(unit)}`,
      bound: error === null ? "" : `± ${bound(error)}${field.claim === "estimate" ? " estimated" : ""}`,
    };
  }

  reason(curve, point) {
    return curve.notes.find((note) => note.point === point)?.note ?? "";
  }
}
