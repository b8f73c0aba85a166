// The stacked figure: drawn by Plotly from our figure data, in the colours of the stylesheet.

import { criticals, heads } from "./heads.js";
import { Overlay } from "./overlay.js";
import { resolver, size } from "./tokens.js";

const NARROW = 640;
const REHEARSALS = 6;
const idle = (work) => (window.requestIdleCallback ? window.requestIdleCallback(work, { timeout: 2000 }) : setTimeout(work, 200));

export class Plot {
  constructor(element, stage) {
    this.element = element;
    this.stage = stage;
    this.figure = null;
    this.fixedWidth = null;
    this.shrink = 1;
    this.onDrawn = () => {};
    this.onZoom = () => {};
    this.wired = false;
    this.overlay = new Overlay(stage);
    this.width = 0;
    new ResizeObserver(() => this.resized()).observe(stage);
  }

  resized() {
    if (this.fixedWidth !== null) return;
    const width = this.stage.clientWidth;
    if (this.figure && Math.abs(width - this.width) > 1) this.draw();
  }

  show(figure) {
    this.figure = figure;
    return this.draw();
  }

  // The figure as Plotly takes it, at a width and with the stylesheet's colours; for a file with its heads in it.
  dressed(width, forFile) {
    const { layout, data, config } = this.figure;
    const narrow = width < NARROW;
    const grow = size("size-tick") / 13;
    const margin = { ...layout.margin };
    if (narrow) {
      margin.l = 58;
      margin.r = 10;
    } else margin.l = Math.round(margin.l * Math.max(1, grow * 0.95));
    if (grow > 1) margin.b = Math.round(margin.b * grow);
    const inner = width - margin.l - margin.r;
    const { annotations, shapes } = criticals(layout.meta);
    if (forFile) {
      const written = heads(layout.meta, inner, margin.t);
      annotations.push(...written.annotations);
      shapes.push(...written.shapes);
      margin.t += written.extra;
    } else margin.t = Math.max(24, this.overlay.write(layout.meta, margin.l, inner));
    const plots = (layout.height - layout.margin.t - layout.margin.b) * this.shrink * Math.max(1, grow);
    if (!forFile) this.overlay.place(layout.meta, margin.t, Math.round(plots));
    const touch = matchMedia("(pointer: coarse)").matches;
    const full = {
      ...layout,
      width,
      height: Math.round(plots) + margin.t + margin.b,
      margin,
      annotations,
      shapes,
      dragmode: touch ? false : layout.dragmode,
    };
    const resolve = resolver();
    return { data: resolve(data), layout: resolve(full), config };
  }

  async draw() {
    if (!this.figure) return;
    this.width = this.fixedWidth ?? this.stage.clientWidth;
    const { data, layout, config } = this.dressed(this.width, false);
    const drawn = window.Plotly.react(this.element, data, layout, config);
    if (!this.wired) {
      this.wired = true;
      this.element.on("plotly_relayout", (change) => this.relayouted(change));
      this.element.on("plotly_afterplot", () => this.onDrawn());
    }
    this.onDrawn();
    await drawn;
    this.onDrawn();
  }

  // Browsers run new code slowly: a few draws out of sight, between other work, make the next one quick.
  async rehearse() {
    if (this.rehearsed || !this.figure) return;
    this.rehearsed = true;
    const { data, layout } = structuredClone(this.dressed(this.width, false));
    const aside = document.createElement("div");
    aside.className = "aside";
    aside.setAttribute("aria-hidden", "true");
    document.body.append(aside);
    for (let turn = 0; turn < REHEARSALS; turn += 1) {
      await new Promise(idle);
      const moved = data.map((trace) => ({ ...trace, ...(trace.y && { y: trace.y.map((value) => value && value * (1 + turn / 10)) }) }));
      await window.Plotly.react(aside, moved, { ...layout, width: layout.width - turn }, { staticPlot: true });
    }
    window.Plotly.purge(aside);
    aside.remove();
  }

  relayouted(change) {
    if ("xaxis.range[0]" in change || "xaxis.range" in change || "xaxis.autorange" in change) {
      this.onZoom(this.range());
    }
  }

  // The shown part of the axis, or null when it is all of it.
  range() {
    const axis = this.element._fullLayout?.xaxis;
    if (!axis || !this.figure) return null;
    const [low, high] = axis.range;
    const [first, last] = this.whole;
    const slack = 1e-9 * (last - first);
    return Math.abs(low - first) < slack && Math.abs(high - last) < slack ? null : [low, high];
  }

  resetZoom() {
    if (!this.figure) return;
    const change = { "xaxis.range": [...this.whole] };
    for (const [name, axis] of Object.entries(this.figure.layout)) {
      if (!name.startsWith("yaxis")) continue;
      if (axis.range) change[`${name}.range`] = [...axis.range];
      else change[`${name}.autorange`] = true;
    }
    window.Plotly.relayout(this.element, change);
  }

  // Geometry for the cursor: pixel of a value, value of a pixel, and the plots' place on the stage.
  geometry() {
    const full = this.element._fullLayout;
    if (!full?.xaxis?._length) return null;
    const axis = full.xaxis;
    return {
      left: axis._offset,
      width: axis._length,
      top: full.margin.t,
      height: full.height - full.margin.t - full.margin.b,
      pixel: (value) => axis._offset + axis.d2p(value),
      value: (pixel) => axis.p2d(pixel - axis._offset),
    };
  }

  // A picture for a file: title, plots and the link, at a width of its own.
  async image(format, title, footer) {
    const width = Math.max(900, this.width);
    const { data, layout } = this.dressed(width, true);
    const zoom = this.range();
    if (zoom) layout.xaxis.range = zoom;
    layout.margin.t += 40;
    layout.margin.b += 26;
    layout.height += 66;
    const ink = layout.font.color;
    layout.annotations.push(
      { text: title, showarrow: false, xref: "paper", yref: "paper", x: 0, y: 1, xanchor: "left", yanchor: "bottom", yshift: layout.margin.t - 34, xshift: -2, font: { size: 20, color: ink, family: getComputedStyle(document.documentElement).getPropertyValue("--font-title").trim() } },
      { text: footer, showarrow: false, xref: "paper", yref: "paper", x: 0, y: 0, xanchor: "left", yanchor: "top", yshift: -layout.margin.b + 22, font: { size: 11, color: ink } },
    );
    return window.Plotly.toImage({ data, layout, config: { staticPlot: true } }, { format, width, height: layout.height, scale: format === "png" ? 2 : 1 });
  }
}
