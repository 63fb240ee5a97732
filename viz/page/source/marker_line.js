// The error of the picked markers over time beside the RMS error of each frame, and the limit in words.

import uPlot from "uplot";
import { colour, onTheme } from "./theme.js";

const HEIGHT = 170;
const LIMIT = 40; // mm

export class MarkerLine {
  constructor(trial, clock, box, caption) {
    Object.assign(this, { trial, clock, box, caption });
    clock.on("markers", () => this.rebuild());
    clock.on("stretch", () => this.setStretch());
    clock.on("row", () => this.moveClock());
    onTheme(() => this.rebuild());
    new ResizeObserver(() => {
      const width = box.clientWidth;
      if (width && width !== this.chart.width) this.chart.setSize({ width, height: HEIGHT });
      this.moveClock();
    }).observe(box);
  }

  rebuild() {
    this.chart?.destroy();
    this.line = undefined;
    const markers = this.clock.markers.filter((name) => this.trial.markers.includes(name));
    const errors = markers.map((name) => this.trial.arrays.error[this.trial.markers.indexOf(name)]);
    const axis = {
      stroke: colour("soft"),
      font: "11px system-ui, sans-serif",
      grid: { stroke: colour("rule"), width: 1 },
      ticks: { stroke: colour("rule"), width: 1, size: 4 },
    };
    const looks = [
      { stroke: colour("look"), width: 1.6 },
      { stroke: colour("measured"), width: 1.6, dash: [6, 3] },
    ];
    this.chart = new uPlot(
      {
        width: this.box.clientWidth || 600,
        height: HEIGHT,
        legend: { show: false },
        cursor: { show: false },
        scales: { x: { time: false }, y: { range: (_, low, high) => [0, Math.max(1.08 * high, 10)] } },
        axes: [
          { ...axis, size: 26, values: (_, ticks) => ticks.map((t, i) => (i === ticks.length - 1 ? `${t} s` : t)) },
          { ...axis, size: 46, values: (_, ticks) => ticks.map((t) => `${t}`) },
        ],
        series: [
          {},
          { stroke: colour("soft"), width: 1.6, points: { show: false } },
          ...errors.map((_, i) => ({ ...looks[i % 2], points: { show: false } })),
        ],
        hooks: { draw: [(chart) => drawLimit(chart), () => this.moveClock()] },
      },
      [this.trial.time, ...[this.trial.rms, ...errors].map(inMillimetres)],
      this.box,
    );
    this.line = document.createElement("div");
    this.line.className = "clock";
    this.chart.over.append(this.line);
    this.#listen();
    this.#say(markers);
    this.setStretch();
  }

  #say(markers) {
    const parts = [["of-rms", "RMS of the frame"], ...markers.map((name, i) => [`of-picked-${i % 2}`, name])];
    this.caption.replaceChildren(
      ...parts.map(([kind, text]) => {
        const part = document.createElement("span");
        part.className = kind;
        part.textContent = text;
        return part;
      }),
    );
  }

  setStretch() {
    if (!this.chart) return;
    const { time, first, last } = this.clock;
    this.chart.setScale("x", { min: time[first], max: time[last] });
    this.moveClock();
  }

  moveClock() {
    if (!this.line) return;
    const at = this.chart.valToPos(this.clock.time[this.clock.row], "x");
    this.line.style.transform = `translateX(${at}px)`;
  }

  #listen() {
    const over = this.chart.over;
    const go = (event) => {
      const left = event.clientX - over.getBoundingClientRect().left;
      this.clock.show(this.clock.rowAt(this.chart.posToVal(left, "x")));
    };
    over.addEventListener("pointerdown", (event) => {
      over.setPointerCapture(event.pointerId);
      go(event);
    });
    over.addEventListener("pointermove", (event) => event.buttons && go(event));
  }
}

function drawLimit(chart) {
  if (chart.scales.y.max < LIMIT) return;
  const { ctx, bbox } = chart;
  const y = chart.valToPos(LIMIT, "y", true);
  ctx.save();
  ctx.strokeStyle = colour("look");
  ctx.setLineDash([2 * devicePixelRatio, 3 * devicePixelRatio]);
  ctx.lineWidth = devicePixelRatio;
  ctx.beginPath();
  ctx.moveTo(bbox.left, y);
  ctx.lineTo(bbox.left + bbox.width, y);
  ctx.stroke();
  ctx.restore();
}

const inMillimetres = (metres) => Array.from(metres, (m) => (Number.isFinite(m) ? 1000 * m : null));
