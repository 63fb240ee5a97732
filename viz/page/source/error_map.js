// The error of every marker in every frame, as one map: where it is dark, or bright in the dark theme, look there.
//
// A column of pixels shows the largest error of the frames that fall into it, so that nothing short is lost.

import { millimetres } from "./trial.js";
import { colour, onTheme, rgb } from "./theme.js";

const ROW = 13; // pixels
const HEAD = 6;
const FOOT = 24;
const FULL = 0.04; // m; the limit above which a marker needs a look
const STOPS = 5;

export class ErrorMap {
  constructor(trial, clock, canvas, told, order) {
    Object.assign(this, { trial, clock, canvas, told, order });
    this.largest = trial.arrays.error.map((errors) =>
      errors.reduce((most, e) => (e > most ? e : most), -1),
    );
    this.base = document.createElement("canvas");
    order.addEventListener("change", () => this.draw());
    clock.on("stretch", () => this.draw());
    clock.on("markers", () => this.draw());
    clock.on("row", () => this.show());
    onTheme(() => this.draw());
    new ResizeObserver(() => this.draw()).observe(canvas.parentElement);
    this.#listen();
  }

  // The markers that have an error at all, in the chosen order.
  #ordered() {
    const seen = this.trial.markers.map((_, m) => m).filter((m) => this.largest[m] >= 0);
    if (this.order.value === "worst") seen.sort((a, b) => this.largest[b] - this.largest[a]);
    return seen;
  }

  draw() {
    this.markers = this.#ordered();
    const width = this.canvas.parentElement.clientWidth;
    if (!width) return;
    this.gutter = Math.min(Math.max(110, 0.16 * width), 170);
    this.wide = width - this.gutter - 8;
    this.high = ROW * this.markers.length;
    const height = HEAD + this.high + FOOT;
    const scale = devicePixelRatio || 1;
    for (const canvas of [this.canvas, this.base]) {
      canvas.width = Math.round(width * scale);
      canvas.height = Math.round(height * scale);
    }
    this.canvas.style.width = `${width}px`;
    this.canvas.style.height = `${height}px`;
    const pen = this.base.getContext("2d");
    pen.scale(scale, scale);
    this.#drawGaps(pen);
    this.#drawCells(pen, scale);
    this.#drawNames(pen);
    this.#drawTimes(pen);
    this.show();
  }

  #drawGaps(pen) {
    pen.save();
    pen.fillStyle = colour("panel");
    pen.fillRect(this.gutter, HEAD, this.wide, this.high);
    pen.beginPath();
    pen.rect(this.gutter, HEAD, this.wide, this.high);
    pen.clip();
    pen.strokeStyle = colour("hatch");
    pen.lineWidth = 1;
    for (let x = this.gutter - this.high; x < this.gutter + this.wide; x += 6) {
      pen.beginPath();
      pen.moveTo(x, HEAD + this.high);
      pen.lineTo(x + this.high, HEAD);
      pen.stroke();
    }
    pen.restore();
  }

  #drawCells(pen, scale) {
    const across = Math.max(Math.round(this.wide * scale), 1);
    const small = new ImageData(across, Math.max(this.markers.length, 1));
    const ramp = Array.from({ length: STOPS }, (_, i) => rgb(`error-${i}`));
    const left = rgb("left-out");
    const { first, last } = this.clock;
    const rows = last - first + 1;
    this.markers.forEach((marker, line) => {
      const errors = this.trial.arrays.error[marker];
      const why = this.trial.arrays.why_not[marker];
      for (let x = 0; x < across; x++) {
        const from = first + Math.floor((x * rows) / across);
        const to = Math.max(from, first + Math.ceil(((x + 1) * rows) / across) - 1);
        let most = -1;
        let out = false;
        for (let row = from; row <= to; row++) {
          if (errors[row] > most) most = errors[row];
          if (errors[row] >= 0 && why[row] !== this.trial.used) out = true;
        }
        if (most < 0) continue;
        small.data.set([...(out ? left : mixed(ramp, most / FULL)), 255], 4 * (line * across + x));
      }
    });
    const cells = document.createElement("canvas");
    [cells.width, cells.height] = [small.width, small.height];
    cells.getContext("2d").putImageData(small, 0, 0);
    pen.imageSmoothingEnabled = false;
    pen.drawImage(cells, this.gutter, HEAD, this.wide, this.high);
    pen.strokeStyle = colour("panel");
    pen.lineWidth = 1;
    for (let line = 1; line < this.markers.length; line++) {
      const y = HEAD + ROW * line;
      pen.strokeRect(this.gutter, y, this.wide, 0);
    }
  }

  #drawNames(pen) {
    pen.textAlign = "right";
    pen.textBaseline = "middle";
    this.markers.forEach((marker, line) => {
      const name = this.trial.markers[marker];
      const picked = this.clock.markers.includes(name);
      pen.font = `${picked ? "700 " : ""}11px system-ui, sans-serif`;
      pen.fillStyle = colour(picked ? "ink" : "soft");
      const y = HEAD + ROW * (line + 0.5);
      pen.fillText(name, this.gutter - 6, y, this.gutter - 8);
      if (!picked) return;
      pen.strokeStyle = colour("ink");
      pen.lineWidth = 1.5;
      pen.strokeRect(this.gutter - 1, y - ROW / 2, this.wide + 2, ROW);
    });
  }

  #drawTimes(pen) {
    const { time, first, last } = this.clock;
    const span = time[last] - time[first] || 1;
    const step = niceStep(span / Math.max(2, this.wide / 90));
    pen.font = "11px system-ui, sans-serif";
    pen.fillStyle = colour("soft");
    pen.textAlign = "center";
    pen.textBaseline = "top";
    for (let t = Math.ceil(time[first] / step) * step; t <= time[last] + 1e-9; t += step) {
      const x = this.gutter + (this.wide * (t - time[first])) / span;
      pen.fillRect(x - 0.5, HEAD + this.high, 1, 4);
      pen.fillText(`${Number(t.toFixed(3))} s`, Math.min(x, this.gutter + this.wide - 12), HEAD + this.high + 7);
    }
  }

  // The map with the clock's line over it.
  show() {
    if (!this.markers || !this.base.width) return;
    const pen = this.canvas.getContext("2d");
    const scale = devicePixelRatio || 1;
    pen.setTransform(1, 0, 0, 1, 0, 0);
    pen.clearRect(0, 0, this.canvas.width, this.canvas.height);
    pen.drawImage(this.base, 0, 0);
    pen.scale(scale, scale);
    const { first, last, row } = this.clock;
    const x = this.gutter + (this.wide * (row - first + 0.5)) / (last - first + 1);
    pen.fillStyle = colour("panel");
    pen.fillRect(x - 2.5, HEAD - 3, 5, this.high + 6);
    pen.fillStyle = colour("ink");
    pen.fillRect(x - 1, HEAD - 4, 2, this.high + 8);
  }

  #at(event) {
    const box = this.canvas.getBoundingClientRect();
    const x = event.clientX - box.left - this.gutter;
    const line = Math.floor((event.clientY - box.top - HEAD) / ROW);
    const { first, last } = this.clock;
    const row = first + Math.floor((x / this.wide) * (last - first + 1));
    const marker = this.markers[Math.min(Math.max(line, 0), this.markers.length - 1)];
    return { marker, row: Math.min(Math.max(row, first), last), inside: x >= 0 };
  }

  #listen() {
    const tell = ({ marker, row }) => {
      const { arrays, markers, time, frame, reasons, used } = this.trial;
      const why = arrays.why_not[marker][row];
      const state = why === used ? "" : `, ${reasons[why].replaceAll("_", " ")}`;
      const error = arrays.error[marker][row];
      const said = Number.isFinite(error) ? millimetres(error) : "no error";
      this.told.textContent = `${markers[marker]} at ${time[row].toFixed(2)} s (frame ${frame[row]}): ${said}${state}`;
    };
    const go = (event) => {
      const at = this.#at(event);
      tell(at);
      if (at.inside) this.clock.show(at.row);
      return at;
    };
    this.canvas.addEventListener("pointerdown", (event) => {
      this.canvas.setPointerCapture(event.pointerId);
      this.clock.pick([this.trial.markers[go(event).marker]]);
    });
    this.canvas.addEventListener("pointermove", (event) => {
      if (event.buttons) go(event);
      else tell(this.#at(event));
    });
  }
}

function mixed(ramp, share) {
  const at = Math.min(Math.max(share, 0), 1) * (ramp.length - 1);
  const low = Math.min(Math.floor(at), ramp.length - 2);
  return ramp[low].map((part, i) => Math.round(part + (ramp[low + 1][i] - part) * (at - low)));
}

export function niceStep(least) {
  const power = 10 ** Math.floor(Math.log10(least));
  return [1, 2, 5, 10].map((m) => m * power).find((step) => step >= 0.999 * least);
}
