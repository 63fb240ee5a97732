// A trial as the page's parts read it: described in JSON, with its numbers over time.

import { unpack } from "./numbers.js";

export async function readTrial() {
  const description = JSON.parse(document.getElementById("description").textContent);
  const text = document.getElementById("numbers").textContent.trim();
  const arrays = await unpack(text, description.arrays);
  const trial = { ...description, arrays, time: arrays.time[0], frame: arrays.frame[0] };
  trial.rms = arrays.rms[0];
  trial.rows = trial.time.length;
  const next = { deg: 0, m: 0 };
  trial.columns = description.columns.map((column) => {
    const index = next[column.unit]++;
    return {
      ...column,
      side: sideOf(column.name),
      value: arrays[`value ${column.unit}`][index],
      sd: arrays[`sd ${column.unit}`][index],
      atLimit: arrays[`at limit ${column.unit}`][index],
    };
  });
  trial.column = Object.fromEntries(trial.columns.map((column) => [column.name, column]));
  trial.used = description.reasons.indexOf("");
  return trial;
}

export function sideOf(name) {
  return /_right(?=_|$)/.test(name) ? "right" : /_left(?=_|$)/.test(name) ? "left" : "middle";
}

// (x, y, z) of a thing in a row, from the channels of an array; parts are 3 for places, 4 for turns.
export function partsOf(channels, thing, row, parts = 3) {
  const found = [];
  for (let i = 0; i < parts; i++) found.push(channels[thing * parts + i][row]);
  return found;
}

// The marker with the largest error among those used in a row, or -1.
export function worstMarker(trial, row) {
  let worst = -1;
  for (let m = 0; m < trial.markers.length; m++) {
    const error = trial.arrays.error[m][row];
    if (trial.arrays.why_not[m][row] !== trial.used || !(error >= 0)) continue;
    if (worst < 0 || error > trial.arrays.error[worst][row]) worst = m;
  }
  return worst;
}

export const millimetres = (metres, digits = 1) =>
  Number.isFinite(metres) ? `${(1000 * metres).toFixed(digits)} mm` : "none";

export function numberText(value, unit) {
  if (!Number.isFinite(value)) return "none";
  const digits = unit === "deg" ? 1 : 3;
  const text = value.toFixed(digits).replace(/^-(0\.0+)$/, "$1"); // nothing is minus nought
  return unit === "deg" ? `${text}°` : `${text} m`;
}
