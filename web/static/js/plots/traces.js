// The kinds of curve that the plots are made of, and the errors that they carry into a data file.

import { variantColour, variantMarker } from "../model/colour.js";
import { theme } from "./theme.js";

export const DASHED = { dash: "dash", width: 1.3 };

export const faded = (hex, alpha) =>
  `rgba(${[1, 3, 5].map((i) => parseInt(hex.slice(i, i + 2), 16)).join(",")},${alpha})`;

/** A standard error as a shaded band around a curve. */
export function band(x, value, error, colour, floor = -Infinity) {
  const upper = value.map((y, i) => y + error[i]);
  const lower = value.map((y, i) => Math.max(floor, y - error[i]));
  return {
    x: [...x, ...[...x].reverse()],
    y: [...upper, ...lower.reverse()],
    mode: "lines",
    line: { width: 0 },
    fill: "toself",
    fillcolor: faded(colour, 0.22),
    hoverinfo: "skip",
    showlegend: false,
  };
}

export function line(x, y, name, colour, more = {}) {
  return { x, y, name, mode: "lines", line: { color: colour, width: 1.8, ...more.line }, ...more.trace };
}

/** Standard errors of a curve that are drawn as a band beside it. */
export const withErrors = (error) => ({ meta: { columns: { "standard error": error } } });

/** A variant's curve with its marker and error bars. */
export function marked({ index, name, x, y, error, hover, size = 6 }) {
  const colour = variantColour(theme.name, index);
  return {
    x,
    y,
    name,
    mode: "lines+markers",
    line: { color: colour, width: 1.5 },
    marker: { color: colour, size, symbol: variantMarker(index) },
    error_y: { type: "data", array: error, color: colour, thickness: 1.4, width: 3 },
    ...withErrors(error),
    hovertemplate: `${hover}<extra>%{fullData.name}</extra>`,
  };
}

/** A small key in the upper right corner, for curves that the page's legend does not name. */
export function corner() {
  const key = { x: 1, xanchor: "right", y: 1, bgcolor: "rgba(0,0,0,0)", font: { size: 10 }, itemwidth: 30 };
  return { showlegend: true, legend: key };
}
