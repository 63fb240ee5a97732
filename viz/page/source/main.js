// The page comes alive: numbers are unpacked, and every part is put on the one clock.

import { Clock } from "./clock.js";
import { ErrorMap } from "./error_map.js";
import { MarkerLine } from "./marker_line.js";
import { Plots, lineOf } from "./plots.js";
import { Scene, canDraw } from "./scene.js";
import { millimetres, readTrial, worstMarker } from "./trial.js";

const byId = (id) => document.getElementById(id);

async function start() {
  const trial = await readTrial();
  const clock = new Clock(trial);
  const plots = new Plots(trial, clock);
  pickFirst(trial, clock);
  new ErrorMap(trial, clock, byId("error-map"), byId("error-told"), byId("error-order"));
  new MarkerLine(trial, clock, byId("marker-line"), byId("marker-names"));
  chooseGroups(trial, plots);
  leftOverRight(trial, plots);
  transport(trial, clock);
  goThere(trial, clock);
  keyboard(trial, clock);
  unfoldForPaper();
  if (canDraw()) player(trial, clock);
  else showStill();
  document.body.classList.add("alive");
}

// Before the reader chose: the first finding's place, else the frame with the largest RMS error.
function pickFirst(trial, clock) {
  const place = trial.findings.find((f) => f.level === "look" && f.places.length)?.places[0];
  let worst = 0;
  trial.rms.forEach((value, row) => {
    if (value > (trial.rms[worst] || 0)) worst = row;
  });
  clock.show(place ? place.worst : worst);
  const marker = worstMarker(trial, clock.row);
  clock.pick(place?.markers.length ? place.markers : marker >= 0 ? [trial.markers[marker]] : []);
}

function chooseGroups(trial, plots) {
  const chips = byId("groups");
  const parent = byId("plots");
  const show = (group) => {
    for (const chip of chips.children) chip.setAttribute("aria-pressed", String(chip.value === group.name));
    plots.clear(parent);
    for (const name of group.columns) addColumn(trial.column[name]);
  };
  const addColumn = (column) => plots.add(parent, [lineOf(column)], column.name, column.meaning);
  for (const group of trial.groups) {
    const chip = document.createElement("button");
    chip.type = "button";
    chip.value = chip.textContent = group.name;
    chip.addEventListener("click", () => show(group));
    chips.append(chip);
  }
  const all = { name: "all", columns: trial.columns.map((column) => column.name) };
  const chip = document.createElement("button");
  chip.type = "button";
  chip.value = chip.textContent = "all";
  chip.addEventListener("click", () => show(all));
  chips.append(chip);
  const turning = trial.groups.find((g) => g.columns.some((name) => trial.column[name].unit === "deg" && trial.column[name].side === "right"));
  let before;
  const first = turning ?? trial.groups[0] ?? all;
  show(first);
  // Paper holds everything, also what was never scrolled to.
  addEventListener("beforeprint", () => {
    before = [...chips.children].find((c) => c.getAttribute("aria-pressed") === "true")?.value;
    plots.clear(parent);
    all.columns.forEach((name) => addColumn(trial.column[name]));
    plots.buildForPaper();
  });
  addEventListener("afterprint", () => plots.live.forEach((plot) => plot.resize()));
  addEventListener("afterprint", () => show([...trial.groups, all].find((g) => g.name === before) ?? first));
}

// Paper cannot be unfolded.
function unfoldForPaper() {
  let folded = [];
  addEventListener("beforeprint", () => {
    folded = [...document.querySelectorAll("details:not([open])")];
    folded.forEach((details) => (details.open = true));
  });
  addEventListener("afterprint", () => folded.forEach((details) => (details.open = false)));
}

function leftOverRight(trial, plots) {
  const parent = byId("side-plots");
  for (const [right, left] of trial.pairs) {
    const lines = [lineOf(trial.column[right]), lineOf(trial.column[left], { dashed: true })];
    plots.add(parent, lines, right.replace(/_right(?=_|$)/, ""), trial.column[right].meaning);
  }
}

function transport(trial, clock) {
  const slider = byId("slider");
  slider.max = trial.rows - 1;
  slider.addEventListener("input", () => clock.show(Number(slider.value)));
  byId("play").addEventListener("click", () => clock.toggle());
  byId("speed").addEventListener("change", (event) => (clock.speed = Number(event.target.value)));
  byId("nearer").addEventListener("click", () => clock.zoom(0.5));
  byId("wider").addEventListener("click", () => clock.zoom(2));
  byId("whole").addEventListener("click", () => clock.stretchAround(trial.rows));
  clock.on("playing", () => {
    byId("play").textContent = clock.playing ? "Pause" : "Play";
  });
  clock.on("row", () => {
    const { row } = clock;
    slider.value = row;
    const worst = worstMarker(trial, row);
    const time = `${trial.time[row].toFixed(2)} s`;
    byId("now-time").textContent = time;
    byId("now-frame").textContent = `frame ${trial.frame[row]}`;
    byId("now-rms").textContent = `RMS ${millimetres(trial.rms[row])}`;
    byId("now-worst").textContent =
      worst < 0 ? "no marker used" : `worst ${trial.markers[worst]} ${millimetres(trial.arrays.error[worst][row])}`;
    slider.setAttribute("aria-valuetext", `${time}, frame ${trial.frame[row]}`);
  });
  marks(trial);
}

// Ticks above the slider where a finding has its place.
function marks(trial) {
  const parent = byId("marks");
  for (const finding of trial.findings) {
    for (const place of finding.places) {
      const mark = document.createElement("span");
      mark.className = finding.level;
      const whole = Math.max(trial.rows - 1, 1);
      mark.style.left = `${(100 * place.first) / whole}%`;
      mark.style.width = `${(100 * (place.last - place.first)) / whole}%`;
      parent.append(mark);
    }
  }
}

function goThere(trial, clock) {
  for (const button of document.querySelectorAll("button[data-finding]")) {
    button.addEventListener("click", () => {
      const place = trial.findings[button.dataset.finding].places[button.dataset.place];
      clock.show(place.worst);
      if (place.markers.length) clock.pick(place.markers);
      byId("player").scrollIntoView({ behavior: "smooth", block: "nearest" });
    });
  }
}

function keyboard(trial, clock) {
  const places = trial.findings.flatMap((finding) => finding.places);
  let next = 0;
  const moves = {
    " ": () => clock.toggle(),
    ArrowLeft: (event) => clock.show(clock.row - (event.shiftKey ? 10 : 1)),
    ArrowRight: (event) => clock.show(clock.row + (event.shiftKey ? 10 : 1)),
    Home: () => clock.show(0),
    End: () => clock.show(trial.rows - 1),
    "+": () => clock.zoom(0.5),
    "-": () => clock.zoom(2),
    0: () => clock.stretchAround(trial.rows),
    n: () => {
      if (!places.length) return;
      const place = places[next++ % places.length];
      clock.show(place.worst);
      if (place.markers.length) clock.pick(place.markers);
    },
  };
  addEventListener("keydown", (event) => {
    if (event.ctrlKey || event.metaKey || event.altKey) return;
    const typing = event.target.closest("select, textarea, input:not([type=range]):not([type=checkbox])");
    const pressing = event.target.closest("button, summary, a, input[type=checkbox]") && event.key === " ";
    if (typing || pressing || !moves[event.key]) return;
    event.preventDefault();
    moves[event.key](event);
  });
}

// Without WebGL the still takes the player's place.
function showStill() {
  document.body.classList.add("no-webgl");
  const still = document.querySelector(".stills figure");
  if (still) byId("player").append(still.cloneNode(true));
}

function player(trial, clock) {
  const scene = new Scene(trial, clock, byId("player"));
  for (const box of document.querySelectorAll("input[data-layer]")) {
    box.addEventListener("change", () => scene.set(box.dataset.layer, box.checked));
    scene.set(box.dataset.layer, box.checked);
  }
  for (const button of document.querySelectorAll("button[data-view]")) {
    button.addEventListener("click", () => scene.look(button.dataset.view));
  }
  byId("lengthen").addEventListener("change", (event) => scene.lengthen(Number(event.target.value)));
  byId("follow").addEventListener("change", (event) => (scene.follow = event.target.checked));
}

start().catch((fault) => {
  document.body.classList.add("broken");
  byId("broken").textContent = `This browser could not unpack the numbers (${fault.message}). The words, tables and pictures below stand.`;
});
