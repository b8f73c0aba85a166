// One cursor through all plots: follows the pointer, moves by arrow keys, stays where it is pinned.

export class Cursor {
  constructor(handle, stage, plot) {
    this.handle = handle;
    this.stage = stage;
    this.plot = plot;
    this.xs = [];
    this.point = null; // index into all points of the axis
    this.pinned = null; // value on the axis
    this.onMove = () => {};
    this.onPin = () => {};
    this.describe = () => "";
    this.down = null;
    stage.addEventListener("pointermove", (event) => this.hover(event));
    stage.addEventListener("pointerleave", () => this.home());
    stage.addEventListener("pointerdown", (event) => { this.down = [event.clientX, event.clientY]; }, true);
    window.addEventListener("pointerup", (event) => this.released(event), true);
    handle.addEventListener("keydown", (event) => this.key(event));
  }

  // points: [value, has numbers] for each point of the axis
  feed(points, pinned) {
    this.xs = points;
    this.pinned = pinned;
    const home = pinned ?? this.lastValue();
    this.point = home === null ? null : this.nearest(home);
    if (this.point === null) this.point = this.nearest(this.middle());
    this.place();
    this.onMove(this.point);
  }

  lastValue() {
    return this.shownValue ?? null;
  }

  middle() {
    return this.xs.length ? (this.xs[0][0] + this.xs.at(-1)[0]) / 2 : 0;
  }

  nearest(value) {
    let best = null;
    let distance = Infinity;
    this.xs.forEach(([x, known], point) => {
      if (known && Math.abs(x - value) < distance) {
        distance = Math.abs(x - value);
        best = point;
      }
    });
    return best;
  }

  inside(event) {
    const box = this.stage.getBoundingClientRect();
    const seen = this.plot.geometry();
    if (!seen) return null;
    const x = event.clientX - box.left;
    const y = event.clientY - box.top;
    const within = x >= seen.left - 2 && x <= seen.left + seen.width + 2 && y >= seen.top - 4 && y <= seen.top + seen.height + 4;
    return within ? seen.value(x) : null;
  }

  hover(event) {
    if (event.buttons) return;
    const value = this.inside(event);
    if (value !== null) this.go(this.nearest(value));
  }

  home() {
    if (this.pinned !== null) this.go(this.nearest(this.pinned));
  }

  released(event) {
    const down = this.down;
    this.down = null;
    // the release may land on the cover that Plotly lays over everything while a button is down
    if (!down || event.button !== 0) return;
    if (Math.hypot(event.clientX - down[0], event.clientY - down[1]) > 4) return;
    const value = this.inside(event);
    if (value === null) return;
    this.go(this.nearest(value));
    this.pin();
  }

  pin() {
    if (this.point === null) return;
    const value = this.xs[this.point][0];
    this.pinned = this.pinned === value ? null : value;
    this.place();
    this.onPin(this.pinned);
  }

  key(event) {
    const steps = { ArrowLeft: -1, ArrowRight: 1, ArrowDown: -1, ArrowUp: 1, PageDown: -10, PageUp: 10 };
    if (event.key in steps) this.step(steps[event.key]);
    else if (event.key === "Home") this.go(this.known(0, 1));
    else if (event.key === "End") this.go(this.known(this.xs.length - 1, -1));
    else if (event.key === "Enter" || event.key === " ") this.pin();
    else if (event.key === "Escape" && this.pinned !== null) {
      this.pinned = null;
      this.place();
      this.onPin(null);
    } else return;
    event.preventDefault();
  }

  known(from, direction) {
    let point = from;
    while (point >= 0 && point < this.xs.length && !this.xs[point][1]) point += direction;
    return point >= 0 && point < this.xs.length ? point : null;
  }

  step(count) {
    if (this.point === null) return this.go(this.known(0, 1));
    const aim = Math.min(this.xs.length - 1, Math.max(0, this.point + count));
    const found = this.known(aim, Math.sign(count));
    return this.go(found ?? this.point);
  }

  go(point) {
    if (point === null || point === this.point) return;
    this.point = point;
    this.place();
    this.onMove(point);
  }

  place() {
    const seen = this.plot.geometry();
    const value = this.point === null ? null : this.xs[this.point]?.[0] ?? null;
    if (value === null) return;
    this.shownValue = value;
    if (seen) {
      const pixel = seen.pixel(value);
      const kept = Math.min(seen.left + seen.width, Math.max(seen.left, pixel));
      // outside the zoomed part the line is not drawn, but the handle stays reachable by keyboard
      this.handle.classList.toggle("away", Math.abs(kept - pixel) > 1);
      this.handle.style.transform = `translate(${kept}px, ${seen.top}px)`;
      this.handle.style.height = `${seen.height}px`;
    }
    this.handle.classList.toggle("pinned", this.pinned !== null && this.nearest(this.pinned) === this.point);
    this.handle.setAttribute("aria-valuemin", this.xs[0][0]);
    this.handle.setAttribute("aria-valuemax", this.xs.at(-1)[0]);
    this.handle.setAttribute("aria-valuenow", value);
    this.handle.setAttribute("aria-valuetext", this.describe(this.point));
  }
}
