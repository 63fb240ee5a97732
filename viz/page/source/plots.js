// Curves over time: each number with its 95 % band and its limits, or left over right, all on the clock.

import uPlot from "uplot";
import { numberText } from "./trial.js";
import { colour, onTheme } from "./theme.js";

const SIGMAS = 1.96;
const HEIGHT = 150;
const PAPER = 320;
const FONT = "11px system-ui, sans-serif";
const SHOW_LIMIT = 0.25; // a limit is drawn when it lies within this share of the curve's span

export class Plots {
  constructor(trial, clock) {
    this.trial = trial;
    this.clock = clock;
    this.live = new Set();
    this.watcher = new IntersectionObserver((entries) => this.#seen(entries), {
      rootMargin: "400px",
    });
    clock.on("row", () => this.live.forEach((plot) => plot.moveClock()));
    clock.on("stretch", () => this.live.forEach((plot) => plot.setStretch()));
    onTheme(() => this.live.forEach((plot) => plot.rebuild()));
    new ResizeObserver(() => this.live.forEach((plot) => plot.resize())).observe(document.body);
  }

  // A place for a plot that is drawn when it comes into view.
  add(parent, lines, title, meaning) {
    const figure = document.createElement("figure");
    figure.className = "plot";
    const caption = document.createElement("figcaption");
    const name = document.createElement("span");
    name.className = "name";
    name.textContent = title;
    name.title = meaning;
    const value = document.createElement("span");
    value.className = "value";
    caption.append(name, value);
    const box = document.createElement("div");
    box.className = "box";
    figure.append(caption, box);
    figure.waiting = { lines, value, box, title };
    parent.append(figure);
    this.watcher.observe(figure);
    return figure;
  }

  clear(parent) {
    for (const plot of [...this.live]) if (parent.contains(plot.box)) this.#drop(plot);
    parent.replaceChildren();
  }

  // Everything, as wide as half a sheet of paper.
  buildForPaper() {
    const figures = [...document.querySelectorAll("figure.plot")];
    figures.filter((figure) => figure.waiting).forEach((figure) => this.#build(figure));
    this.live.forEach((plot) => plot.chart.setSize({ width: PAPER, height: HEIGHT }));
  }

  #seen(entries) {
    for (const entry of entries) {
      if (entry.isIntersecting && entry.target.waiting) this.#build(entry.target);
    }
  }

  #build(figure) {
    const { lines, value, box, title } = figure.waiting;
    figure.waiting = undefined;
    this.watcher.unobserve(figure);
    this.live.add(new Plot(this.trial, this.clock, lines, value, box, title));
  }

  #drop(plot) {
    this.live.delete(plot);
    plot.chart.destroy();
  }
}

// What a column's line is: its name, its numbers, its look.
export function lineOf(column, { dashed = false } = {}) {
  return { column, colour: `side-${column.side}`, dashed };
}

class Plot {
  constructor(trial, clock, lines, value, box, title) {
    Object.assign(this, { trial, clock, lines, value, box, title });
    this.rebuild();
  }

  rebuild() {
    this.chart?.destroy();
    this.line = undefined;
    this.chart = new uPlot(this.#options(), this.#data(), this.box);
    this.line = document.createElement("div");
    this.line.className = "clock";
    this.chart.over.append(this.line);
    this.#listen();
    this.setStretch();
    this.moveClock();
  }

  resize() {
    const width = this.box.clientWidth;
    if (width && width !== this.chart.width) this.chart.setSize({ width, height: HEIGHT });
    this.moveClock();
  }

  setStretch() {
    const { time, first, last } = this.clock;
    this.chart.setScale("x", { min: time[first], max: time[last] });
    this.moveClock();
  }

  moveClock() {
    if (!this.line) return;
    const { row, time } = this.clock;
    const at = this.chart.valToPos(time[row], "x");
    this.line.style.transform = `translateX(${at}px)`;
    this.value.replaceChildren(
      ...this.lines.map((line) => {
        const part = document.createElement("span");
        const { value, sd, unit } = line.column;
        const half = SIGMAS * sd[row];
        const width = Number.isFinite(half) ? ` ±${numberText(half, unit)}` : " (not determined)";
        part.textContent = `${numberText(value[row], unit)}${width}`;
        if (this.lines.length > 1) part.className = `of-${line.column.side}`;
        return part;
      }),
    );
  }

  #data() {
    const data = [this.trial.time];
    for (const { column } of this.lines) {
      const low = column.value.map((v, i) => v - SIGMAS * column.sd[i]);
      const high = column.value.map((v, i) => v + SIGMAS * column.sd[i]);
      data.push(...[column.value, high, low].map(withoutNaN));
    }
    return data;
  }

  #options() {
    const axis = {
      stroke: colour("soft"),
      font: FONT,
      grid: { stroke: colour("rule"), width: 1 },
      ticks: { stroke: colour("rule"), width: 1, size: 4 },
    };
    const series = [{}];
    const bands = [];
    this.lines.forEach(({ column, colour: name, dashed }, index) => {
      const known = column.sd.some(Number.isFinite);
      const stroke = colour(known ? name : "soft");
      const dash = dashed || !known ? [6, 4] : undefined;
      series.push({ stroke, width: 1.6, dash, points: { show: false } });
      const edge = { stroke: "transparent", width: 0, points: { show: false } };
      series.push(edge, edge);
      bands.push({ series: [3 * index + 2, 3 * index + 3], fill: `${stroke}33` });
    });
    return {
      width: this.box.clientWidth || 300,
      height: HEIGHT,
      legend: { show: false },
      cursor: { show: false },
      scales: { x: { time: false }, y: { range: (_, low, high) => this.#span(low, high) } },
      axes: [
        { ...axis, size: 26, values: (_, ticks) => ticks.map((t, i) => (i === ticks.length - 1 ? `${t} s` : t)) },
        { ...axis, size: 46, space: 26 },
      ],
      series,
      bands,
      hooks: {
        // uPlot settles scales and axes after the call; only then is it known where the clock stands.
        draw: [(chart) => this.#drawLimits(chart), () => this.moveClock()],
      },
    };
  }

  #span(low, high) {
    if (!(low <= high)) return [-1, 1];
    const least = this.lines[0].column.unit === "deg" ? 4 : 0.02;
    const pad = Math.max(0.06 * (high - low), (least - (high - low)) / 2, 0);
    for (const limit of this.#limits()) {
      const near = SHOW_LIMIT * Math.max(high - low, least);
      if (limit > high && limit < high + near) high = limit;
      if (limit < low && limit > low - near) low = limit;
    }
    return [low - pad, high + pad];
  }

  #limits() {
    const all = this.lines.flatMap(({ column }) => [column.lower, column.upper]);
    return [...new Set(all)].filter((limit) => limit !== null);
  }

  #drawLimits(chart) {
    const { ctx, bbox } = chart;
    ctx.save();
    ctx.strokeStyle = colour("look");
    ctx.lineWidth = devicePixelRatio;
    ctx.setLineDash([2 * devicePixelRatio, 3 * devicePixelRatio]);
    const { min, max } = chart.scales.y;
    for (const limit of this.#limits()) {
      if (limit < min || limit > max) continue;
      const y = chart.valToPos(limit, "y", true);
      ctx.beginPath();
      ctx.moveTo(bbox.left, y);
      ctx.lineTo(bbox.left + bbox.width, y);
      ctx.stroke();
    }
    ctx.setLineDash([]);
    ctx.fillStyle = colour("look");
    for (const { column } of this.lines) this.#drawAtLimit(chart, column);
    ctx.restore();
  }

  // A thick stroke at the foot wherever the number sits at a limit.
  #drawAtLimit(chart, column) {
    const { ctx, bbox } = chart;
    const { time, rows } = this.trial;
    for (let row = this.clock.first; row <= this.clock.last; row++) {
      if (!column.atLimit[row]) continue;
      const from = chart.valToPos(time[row], "x", true);
      const to = chart.valToPos(time[Math.min(row + 1, rows - 1)], "x", true);
      const thick = 4 * devicePixelRatio;
      ctx.fillRect(from, bbox.top + bbox.height - thick, Math.max(to - from, 1), thick);
    }
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

const withoutNaN = (values) => Array.from(values, (v) => (Number.isFinite(v) ? v : null));
