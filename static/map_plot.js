// The map itself: a plot of which a box can be chosen, and the place of its cells.

import { Plot } from "./plot.js";

const LEAST = 6; // pixels of the frame around a cell
const NARROW = 640;
const LOWER = 0.66; // of the height, on narrow screens

export class MapPlot extends Plot {
  constructor(element, stage) {
    super(element, stage);
    this.onBox = () => {};
  }

  dressed(width, forFile) {
    const shrink = this.shrink;
    if (width < NARROW && this.fixedWidth === null) this.shrink = LOWER;
    try {
      return super.dressed(width, forFile);
    } finally {
      this.shrink = shrink;
    }
  }

  // All of a map is shown: a box leads to another map.
  range() {
    return null;
  }

  // A box was drawn: what it spans, for each axis that it changes.
  relayouted(change) {
    const span = (axis) => {
      const ends = [change[`${axis}.range[0]`], change[`${axis}.range[1]`]];
      return ends.every(Number.isFinite) ? ends : null;
    };
    const [x, y] = [span("xaxis"), span("yaxis")];
    if (x || y) this.onBox(x, y);
  }

  // Pixels on the stage, and the values at a pixel; null before anything is drawn.
  area() {
    const full = this.element._fullLayout;
    if (!full?.xaxis?._length || !full.yaxis?._length) return null;
    const { xaxis, yaxis } = full;
    return {
      left: xaxis._offset,
      top: yaxis._offset,
      width: xaxis._length,
      height: yaxis._length,
      pixel: (x, y) => [xaxis._offset + xaxis.d2p(x), yaxis._offset + yaxis.d2p(y)],
      values: (left, top) => [xaxis.p2d(left - xaxis._offset), yaxis.p2d(top - yaxis._offset)],
    };
  }

  cellSize(area, xs, ys) {
    const least = (length, count) => Math.max(LEAST, length / count);
    return [least(area.width, xs.length), least(area.height, ys.length)];
  }
}
