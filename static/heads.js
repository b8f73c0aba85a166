// Title and key above each panel as part of a figure that goes into a file; the page writes its own.

import { size } from "./tokens.js";

const NARROW = 420; // below this width of the plots, keys are set tighter
export const GLYPHS = {
  circle: "●", square: "■", diamond: "◆", "triangle-up": "▲", "triangle-down": "▼", star: "★",
  "triangle-left": "◀", "triangle-right": "▶", "circle-open": "○",
};

const pen = document.createElement("canvas").getContext("2d");

function width(text, font) {
  pen.font = font;
  return pen.measureText(text.replace(/<[^>]*>/g, "")).width;
}

function fonts() {
  const root = getComputedStyle(document.documentElement);
  return {
    title: root.getPropertyValue("--font-title").trim(),
    key: root.getPropertyValue("--font-figure").trim(),
  };
}

// Break a key's entries into lines no wider than the plot.
function lines(entries, limit) {
  const rows = [[]];
  let used = 0;
  for (const entry of entries) {
    if (used + entry.wide > limit && rows.at(-1).length) {
      rows.push([]);
      used = 0;
    }
    rows.at(-1).push({ ...entry, left: used });
    used += entry.wide;
  }
  return rows;
}

function measured(key, style) {
  return key.map((entry) => ({
    ...entry,
    wide: (entry.marker_only ? 16 : style.sample + 6) + width(entry.label, style.keyFont) + style.space,
  }));
}

function place(entry, at, domainTop, up, style, out) {
  const base = { xref: "paper", yref: "paper", xanchor: 0, yanchor: domainTop };
  const height = style.keySize;
  if (!entry.marker_only) {
    out.shapes.push({
      type: "line", xref: "paper", yref: "paper", xsizemode: "pixel", ysizemode: "pixel",
      xanchor: base.xanchor, yanchor: base.yanchor, x0: at, x1: at + style.sample, y0: up, y1: up,
      line: { color: `token:${entry.token}`, dash: entry.dash, width: entry.width },
    });
  }
  const glyph = entry.symbol ? GLYPHS[entry.symbol] : null;
  if (glyph) out.annotations.push(words(glyph, at + (entry.marker_only ? 0 : style.sample / 2 - 6), domainTop, up, { size: height + 1, color: `token:${entry.token}` }));
  const left = at + (entry.marker_only ? 16 : style.sample + 6);
  out.annotations.push(words(entry.label, left, domainTop, up, { size: height, color: "token:ink", family: style.keyFamily }));
}

function words(text, left, domainTop, up, font) {
  return {
    text, showarrow: false, xref: "paper", yref: "paper", x: 0, y: domainTop,
    xanchor: "left", yanchor: "middle", xshift: left, yshift: up, align: "left", borderpad: 0, font,
  };
}

// Returns annotations, shapes, and by how much more than `head` pixels the first panel needs above it.
export function heads(meta, plotWidth, head) {
  const named = fonts();
  const style = {
    titleSize: size("size-head"),
    keySize: size("size-key"),
    keyFamily: named.key,
    sample: plotWidth < NARROW ? 17 : 26,
    space: plotWidth < NARROW ? 9 : 16,
  };
  style.keyFont = `${style.keySize}px ${named.key}`;
  const titleFont = `${style.titleSize}px ${named.title}`;
  const row = style.keySize * 1.35;
  const out = { annotations: [], shapes: [], extra: 0 };
  let ceiling = 0;

  for (const panel of meta.panels) {
    const top = panel.domain[1];
    const entries = measured(panel.key, style);
    const total = entries.reduce((sum, entry) => sum + entry.wide, 0);
    const beside = width(panel.title, titleFont) * 1.06 + 24 + total <= plotWidth;
    const keyRows = beside ? [] : lines(entries, plotWidth);
    const titleUp = 11 + keyRows.length * row;
    out.annotations.push(words(`<b>${panel.title}</b>`, -2, top, titleUp, { size: style.titleSize, color: "token:ink", family: named.title }));
    if (beside) {
      let at = plotWidth - total + style.space;
      for (const entry of entries) {
        place(entry, at, top, titleUp - 1, style, out);
        at += entry.wide;
      }
    }
    keyRows.forEach((entriesOfRow, number) => {
      for (const entry of entriesOfRow) place(entry, entry.left, top, 10 + (keyRows.length - 1 - number) * row, style, out);
    });
    if (panel === meta.panels[0]) ceiling = titleUp + style.titleSize * 0.65;
  }

  if (meta.family.length) {
    const rows = lines(measured(meta.family, style), plotWidth);
    const base = ceiling + row * 0.6;
    rows.forEach((entries, number) => {
      for (const entry of entries) place(entry, entry.left, 1, base + (rows.length - 1 - number) * row, style, out);
    });
    ceiling = base + (rows.length - 0.5) * row;
  }

  out.extra = Math.max(0, Math.ceil(ceiling + 6 - head));

  return out;
}

// The critical places: a line through each panel, its symbol in the first one.
export function criticals(meta) {
  const out = { annotations: [], shapes: [] };
  for (const critical of meta.critical) {
    for (const panel of meta.panels) {
      out.shapes.push({
        type: "line", xref: "x", yref: "paper", x0: critical.x, x1: critical.x,
        y0: panel.domain[0], y1: panel.domain[1], layer: "above",
        line: { color: `token:${critical.token}`, width: 1.3 },
      });
    }
    out.annotations.push({
      text: critical.label, showarrow: false, xref: "x", yref: "paper", x: critical.x, y: 1,
      xanchor: "left", yanchor: "top", xshift: 3, yshift: -1, bgcolor: "token:paper/0.8", borderpad: 1,
      font: { size: size("size-key") + 1, color: `token:${critical.token}` },
    });
  }
  return out;
}
