// Cross-sections of a map: the row and the column through the cursor, with bounds.

import { resolver, size } from "./tokens.js";

const HEIGHT = 240;
const PAPER_WIDTH = 335;
const THINNEST = 0.004; // share of the panel below which a band would not be seen

export class Cuts {
  constructor(section) {
    this.section = section;
    this.data = null;
    this.fixedWidth = null;
    this.asked = false;
    this.width = 0;
    new ResizeObserver(() => {
      if (this.fixedWidth === null && section.clientWidth !== this.width) this.soon();
    }).observe(section);
    window.addEventListener("beforeprint", () => { this.fixedWidth = PAPER_WIDTH; this.draw(); });
    window.addEventListener("afterprint", () => { this.fixedWidth = null; this.draw(); });
  }

  show(data, row, column) {
    Object.assign(this, { data, row, column });
    this.section.hidden = false;
    this.soon();
  }

  // at most once for each picture of the screen
  soon() {
    if (this.asked) return;
    this.asked = true;
    requestAnimationFrame(() => {
      this.asked = false;
      this.draw();
    });
  }

  draw() {
    if (!this.data) return;
    this.width = this.section.clientWidth;
    const { data, row, column } = this;
    const resolve = resolver();
    const { axis, across, values, bounds, state } = data;
    this.one("cut-row", resolve, axis, axis.values[column], values[row], bounds[row], state[row]);
    this.one("cut-column", resolve, across, across.values[row], ...[values, bounds, state].map((grid) => grid.map((line) => line[column])));
  }

  one(id, resolve, axis, here, values, bounds, state) {
    const element = document.getElementById(id);
    const width = this.fixedWidth ?? element.clientWidth;
    if (!width) return;
    const log = this.data.scale === "log";
    const known = values.filter((value) => value !== null && (!log || value > 0));
    const spread = known.length ? Math.max(...known) - Math.min(...known) : 0;
    const traces = [
      this.band(axis.values, values, bounds, spread),
      {
        type: "scatter",
        mode: "lines+markers",
        x: axis.values,
        y: values.map((value) => (log && value <= 0 ? null : value)),
        line: { color: "token:even", width: 1.8 },
        // filled where computed
        marker: { size: 4, color: state.map((one) => (one === 2 ? "token:even" : "token:paper")), line: { width: 1, color: "token:even" } },
        hoverinfo: "skip",
      },
    ].filter(Boolean);
    const grow = Math.max(1, size("size-tick") / 13);
    const layout = {
      width,
      height: HEIGHT * grow,
      margin: { l: Math.round(66 * grow), r: 12, t: 10, b: Math.round(50 * grow) },
      paper_bgcolor: "token:paper",
      plot_bgcolor: "token:paper",
      font: { family: "token:font-figure", size: "token:size-tick", color: "token:ink" },
      showlegend: false,
      hovermode: false,
      dragmode: false,
      xaxis: { ...this.look(axis.title), range: [axis.values[0], axis.values.at(-1)] },
      yaxis: { ...this.look(this.data.shown.axis_title), type: log ? "log" : "linear" },
      shapes: [{ type: "line", xref: "x", yref: "paper", x0: here, x1: here, y0: 0, y1: 1, line: { color: "token:critical", width: 1 } }],
    };
    window.Plotly.react(element, resolve(traces), resolve(layout), { displayModeBar: false, staticPlot: true });
  }

  // The bounds, where they are wide enough to be seen.
  band(xs, values, bounds, spread) {
    const kept = xs.map((_, number) => number).filter((number) => values[number] !== null && bounds[number] > THINNEST * spread);
    if (!kept.length || !(spread > 0)) return null;
    const [x, y] = [[], []];
    for (const number of kept) {
      x.push(xs[number], xs[number], null);
      y.push(values[number] - bounds[number], values[number] + bounds[number], null);
    }
    return { type: "scatter", mode: "lines", x, y, line: { color: "token:even/0.4", width: 5 }, hoverinfo: "skip" };
  }

  look(title) {
    return {
      title: { text: title, font: { size: "token:size-axis", color: "token:ink" }, standoff: 8 },
      tickfont: { size: "token:size-tick", color: "token:ink" },
      gridcolor: "token:hairline",
      linecolor: "token:rule",
      showline: true,
      mirror: true,
      zeroline: false,
      ticks: "outside",
      ticklen: 4,
      tickcolor: "token:rule",
      exponentformat: "power",
      nticks: 6,
    };
  }
}
