// Colours come from the style sheet alone, so that light and dark are decided in one place.

const listeners = [];

export const colour = (name) =>
  getComputedStyle(document.documentElement).getPropertyValue(`--${name}`).trim();

export function onTheme(listener) {
  listeners.push(listener);
}

const tell = () => listeners.forEach((listener) => listener());
matchMedia("(prefers-color-scheme: dark)").addEventListener("change", tell);

export function rgb(name) {
  const digits = colour(name).slice(1);
  return [0, 2, 4].map((at) => parseInt(digits.slice(at, at + 2), 16));
}
