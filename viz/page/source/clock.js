// The one clock of a page: which row is shown, which stretch of time, which markers are picked out.

const SHORTEST = 12; // rows that a stretch holds at least

export class Clock {
  constructor(trial) {
    this.time = trial.time;
    this.rows = trial.rows;
    this.row = 0;
    this.first = 0;
    this.last = Math.max(trial.rows - 1, 0);
    this.markers = [];
    this.speed = 1;
    this.playing = false;
    this.listeners = { row: [], stretch: [], markers: [], playing: [] };
  }

  on(what, listener) {
    this.listeners[what].push(listener);
    listener();
  }

  tell(what) {
    for (const listener of this.listeners[what]) listener();
  }

  show(row) {
    const wanted = Math.min(Math.max(Math.round(row), 0), this.rows - 1);
    if (wanted === this.row) return;
    this.row = wanted;
    if (wanted < this.first || wanted > this.last) this.stretchAround(this.last - this.first);
    this.tell("row");
  }

  pick(markers) {
    this.markers = markers;
    this.tell("markers");
  }

  // Show so many rows around the present one.
  stretchAround(length) {
    const span = Math.min(Math.max(Math.round(length), SHORTEST), this.rows - 1);
    this.first = Math.min(Math.max(this.row - Math.floor(span / 2), 0), this.rows - 1 - span);
    this.last = this.first + span;
    this.tell("stretch");
  }

  zoom(factor) {
    this.stretchAround((this.last - this.first) * factor);
  }

  rowAt(time) {
    let low = 0;
    let high = this.rows - 1;
    while (low < high) {
      const middle = (low + high) >> 1;
      if (this.time[middle] < time) low = middle + 1;
      else high = middle;
    }
    return low > 0 && time - this.time[low - 1] < this.time[low] - time ? low - 1 : low;
  }

  toggle() {
    this.playing = !this.playing;
    this.tell("playing");
    if (!this.playing) return;
    if (this.row >= this.rows - 1) this.show(0);
    let before = performance.now();
    let now = this.time[this.row];
    const step = (instant) => {
      if (!this.playing) return;
      now += ((instant - before) / 1000) * this.speed;
      before = instant;
      if (Math.abs(this.time[this.row] - now) > 0.5) now = this.time[this.row]; // moved by hand
      if (now >= this.time[this.rows - 1]) {
        this.show(this.rows - 1);
        this.playing = false;
        this.tell("playing");
        return;
      }
      this.show(this.rowAt(now));
      requestAnimationFrame(step);
    };
    requestAnimationFrame(step);
  }
}
