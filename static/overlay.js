// Title and key above each panel, as text of the page: quick to draw and read by screen readers.

import { GLYPHS } from "./heads.js";

const SPACE = "http://www.w3.org/2000/svg";
const DASHES = { solid: "", dash: "7 4", dot: "2 3", dashdot: "7 3 2 3" };
const LIFT = 5; // pixels between a head and its panel

function sample(entry) {
  const box = document.createElementNS(SPACE, "svg");
  const wide = entry.marker_only ? 12 : 26;
  box.setAttribute("viewBox", `0 0 ${wide} 12`);
  box.setAttribute("class", `sample token-${entry.token}`);
  box.setAttribute("width", wide);
  box.setAttribute("height", 12);
  box.setAttribute("aria-hidden", "true");
  if (!entry.marker_only) {
    const line = document.createElementNS(SPACE, "line");
    const place = { x1: 0, x2: wide, y1: 6, y2: 6, stroke: "currentColor", "stroke-width": entry.width };
    for (const [name, value] of Object.entries(place)) line.setAttribute(name, value);
    if (DASHES[entry.dash]) line.setAttribute("stroke-dasharray", DASHES[entry.dash]);
    box.append(line);
  }
  if (entry.symbol) {
    const glyph = document.createElementNS(SPACE, "text");
    glyph.setAttribute("x", wide / 2);
    glyph.setAttribute("y", 10.5);
    glyph.setAttribute("text-anchor", "middle");
    glyph.setAttribute("fill", "currentColor");
    glyph.setAttribute("font-size", 12);
    glyph.textContent = GLYPHS[entry.symbol];
    box.append(glyph);
  }
  return box;
}

// Labels come with <sub> marks only; they are built here, never parsed.
export function marked(text) {
  const out = document.createElement("span");
  for (const piece of text.split(/(<sub>.*?<\/sub>)/)) {
    const below = /^<sub>(.*)<\/sub>$/.exec(piece);
    if (below) out.append(Object.assign(document.createElement("sub"), { textContent: below[1] }));
    else out.append(piece);
  }
  return out;
}

export function key(entries) {
  const list = document.createElement("span");
  list.className = "key";
  for (const entry of entries) {
    const item = document.createElement("span");
    item.className = "entry";
    item.append(sample(entry), marked(entry.label));
    list.append(item);
  }
  return list;
}

export class Overlay {
  constructor(stage) {
    this.box = document.createElement("div");
    this.box.className = "heads";
    stage.prepend(this.box);
    this.written = "";
    this.heads = [];
  }

  // Writes the heads and returns how many pixels the first panel needs above it.
  write(meta, left, width) {
    const told = JSON.stringify([meta.panels, meta.family]);
    if (told !== this.written) {
      this.written = told;
      this.heads = meta.panels.map((panel, number) => {
        const head = document.createElement("div");
        head.className = "head";
        const title = document.createElement("span");
        title.className = "head-title";
        title.textContent = panel.title;
        if (number === 0 && meta.family.length) {
          const family = key(meta.family);
          family.classList.add("family");
          head.append(family);
        }
        head.append(title, key(panel.key));
        return head;
      });
      this.box.replaceChildren(...this.heads);
    }
    for (const head of this.heads) {
      head.style.left = `${left}px`;
      head.style.width = `${width}px`;
    }
    return this.heads[0].offsetHeight + LIFT;
  }

  // Puts each head above its panel: `top` and `height` are those of all plots together.
  place(meta, top, height) {
    meta.panels.forEach((panel, number) => {
      this.heads[number].style.top = `${top + (1 - panel.domain[1]) * height - LIFT}px`;
    });
  }
}
