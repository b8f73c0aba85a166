// The cursor of a map: follows the pointer, moves by arrow keys, and says which cell it is on.

const FAR = 10;

function nearest(values, wanted) {
  let best = 0;
  values.forEach((value, number) => {
    if (Math.abs(value - wanted) < Math.abs(values[best] - wanted)) best = number;
  });
  return best;
}

export class MapCursor {
  // calls: moved(row, column), opened(), zoomed(factor)
  constructor(handle, stage, plot, calls) {
    Object.assign(this, { handle, stage, plot, calls });
    this.xs = [];
    this.ys = [];
    this.row = null;
    this.column = null;
    this.down = null;
    stage.addEventListener("pointermove", (event) => this.hover(event));
    stage.addEventListener("pointerdown", (event) => { this.down = [event.clientX, event.clientY]; }, true);
    window.addEventListener("pointerup", (event) => this.released(event), true);
    handle.addEventListener("keydown", (event) => this.key(event));
  }

  // New numbers: the cursor stays where it was, in values.
  feed(xs, ys, home = null) {
    const there = this.row === null ? home : [this.xs[this.column], this.ys[this.row]];
    [this.xs, this.ys] = [xs, ys];
    const [x, y] = there ?? [(xs[0] + xs.at(-1)) / 2, (ys[0] + ys.at(-1)) / 2];
    [this.column, this.row] = [nearest(xs, x), nearest(ys, y)];
    this.handle.hidden = false;
    this.place();
    this.calls.moved(this.row, this.column);
  }

  get here() {
    return this.row === null ? null : [this.xs[this.column], this.ys[this.row]];
  }

  cellAt(event) {
    const area = this.plot.area();
    if (!area || !this.xs.length) return null;
    const box = this.stage.getBoundingClientRect();
    const [left, top] = [event.clientX - box.left, event.clientY - box.top];
    const within = left >= area.left && left <= area.left + area.width && top >= area.top && top <= area.top + area.height;
    if (!within) return null;
    const [x, y] = area.values(left, top);
    return [nearest(this.ys, y), nearest(this.xs, x)];
  }

  hover(event) {
    if (event.buttons || event.pointerType === "touch") return;
    const cell = this.cellAt(event);
    if (cell) this.go(...cell);
  }

  released(event) {
    const down = this.down;
    this.down = null;
    // the release may land on the cover that Plotly lays over everything while a button is down
    if (!down || event.button !== 0) return;
    if (Math.hypot(event.clientX - down[0], event.clientY - down[1]) > 4) return;
    const cell = this.cellAt(event);
    if (!cell) return;
    this.go(...cell);
    // a finger puts the cursor somewhere; a mouse has been there already
    if (event.pointerType !== "touch") this.calls.opened();
  }

  key(event) {
    const far = event.shiftKey ? FAR : 1;
    const steps = { ArrowLeft: [-far, 0], ArrowRight: [far, 0], ArrowDown: [0, -far], ArrowUp: [0, far], PageDown: [0, -FAR], PageUp: [0, FAR] };
    if (event.ctrlKey || event.metaKey || event.altKey) return;
    if (event.key in steps) this.step(...steps[event.key]);
    else if (event.key === "Home") this.go(this.row, 0);
    else if (event.key === "End") this.go(this.row, this.xs.length - 1);
    else if (event.key === "Enter") this.calls.opened();
    else if (event.key === "+" || event.key === "=") this.calls.zoomed(0.5);
    else if (event.key === "-" || event.key === "−") this.calls.zoomed(2);
    else return;
    event.preventDefault();
  }

  step(right, up) {
    const within = (number, count) => Math.min(count - 1, Math.max(0, number));
    this.go(within(this.row + up, this.ys.length), within(this.column + right, this.xs.length));
  }

  go(row, column) {
    if (row === null || (row === this.row && column === this.column)) return;
    [this.row, this.column] = [row, column];
    this.place();
    this.calls.moved(row, column);
  }

  place() {
    const area = this.plot.area();
    if (!area || this.row === null) return;
    const [left, top] = area.pixel(this.xs[this.column], this.ys[this.row]);
    const [vertical, horizontal, frame] = this.handle.children;
    Object.assign(this.handle.style, { left: `${area.left}px`, top: `${area.top}px`, width: `${area.width}px`, height: `${area.height}px` });
    vertical.style.left = `${left - area.left}px`;
    horizontal.style.top = `${top - area.top}px`;
    const [wide, high] = this.plot.cellSize(area, this.xs, this.ys);
    Object.assign(frame.style, { left: `${left - area.left}px`, top: `${top - area.top}px`, width: `${wide}px`, height: `${high}px` });
  }
}
