// Tables of the point selected: widths, checks of the grid, invariants, scales.

import { brief, withError } from "../model/quantities.js";
import { make } from "./elements.js";

const UNITS = {
  _ps2_per_km: "ps²/km", _per_w_km: "1/(W·km)", _per_ns: "1/ns", _ps: "ps", _km: "km", _ghz: "GHz", _thz: "THz",
  _mw: "mW", _w: "W", _db: "dB", _m: "m", _rad: "rad",
};

// Where a name of the interface is not what people say.
const WORDS = {
  fwhm: "Full width at half maximum", rms: "Rms width", "n squared": "Ratio of lengths N²",
  "wall closed form": "Wall width, closed form", "thermal walls": "Walls of thermal light",
  "thermal wall": "Wall width of thermal light", energy: "Energy of both", hamiltonian: "Hamiltonian",
};

/** A name of the interface as people read it, and its unit: coherence_time_ps → [coherence time, ps]. */
function named(key) {
  const ending = Object.keys(UNITS).find((tail) => key.endsWith(tail));
  const words = (ending ? key.slice(0, -ending.length) : key).replaceAll("_", " ");
  return [WORDS[words] ?? words.charAt(0).toUpperCase() + words.slice(1), ending ? UNITS[ending] : ""];
}

const titled = (key) => {
  const [words, unit] = named(key);
  return unit ? `${words} (${unit})` : words;
};

const cellOf = (found) => {
  if (found === null || found === undefined) return "–";
  if (typeof found === "string") return found;
  return typeof found === "object" ? withError(found.value, found.standard_error) : brief(found, 4);
};

function fill(table, heads, rows, none) {
  const body = rows.length ? rows : [make("tr", {}, make("td", { colspan: Math.max(1, heads.length) }, none))];
  table.replaceChildren(
    make("thead", {}, make("tr", {}, ...heads.map((text) => make("th", { scope: "col" }, text)))),
    make("tbody", {}, ...body),
  );
}

const line = (title, cells, attributes = {}) =>
  make("tr", attributes, make("th", { scope: "row" }, title), ...cells.map((cell) => make("td", {}, cell)));

const PLACES = { input1: "input 1", input2: "input 2", output1: "output 1", output2: "output 2" };

/** Widths of the four spectra. */
export function fillWidths(table, widths, none) {
  const places = Object.keys(PLACES);
  const rows = Object.keys(widths?.input1 ?? {}).map((key) =>
    line(titled(key), places.map((place) => cellOf(widths[place]?.[key]))));
  fill(table, ["", ...Object.values(PLACES)], rows, none);
}

/** Checks of the grid, each with what to do where it fails. */
export function fillChecks(table, checks, none) {
  const rows = (checks ?? []).map(({ title, value, unit, ok, advice }) =>
    line(title.charAt(0).toUpperCase() + title.slice(1), [
      ok ? "holds" : "fails", `${brief(value, 3)}${unit && unit !== "1" ? ` ${unit}` : ""}`, advice || "",
    ], { class: ok ? null : "failing" }));
  fill(table, ["Check", "", "Value", "Advice"], rows, none);
}

/** Drift of what the equations keep; the note says why one is not kept here. */
export function fillInvariants(table, invariants, none) {
  const { note, ...drifts } = invariants ?? {};
  const rows = Object.entries(drifts).map(([key, drift]) =>
    line(titled(key), [brief(drift, 2), drift === null ? note : ""]));
  fill(table, ["Quantity", "Relative drift", ""], rows, none);
}

/** Scales of the experiment. */
export function fillScales(table, scales, none) {
  const rows = Object.entries(scales ?? {}).map(([key, value]) => line(titled(key), [cellOf(value)]));
  fill(table, ["Scale", "Value"], rows, none);
}
