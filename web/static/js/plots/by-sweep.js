// One number of each point against the swept parameter.

import { variantColour, variantMarker } from "../model/colour.js";
import { axis, scaleOfSweep } from "./surface.js";
import { theme, token } from "./theme.js";
import { line, marked } from "./traces.js";

const cursor = (x) => [{
  type: "line", x0: x, x1: x, yref: "paper", y0: 0, y1: 1, layer: "below",
  line: { color: token("--cursor"), width: 1, dash: "dot" },
}];

const sweepLayout = (sweep, mark, yaxis) => ({
  xaxis: axis(sweep.title, { ...scaleOfSweep(sweep), zeroline: false }), yaxis, shapes: cursor(mark),
});

/**
 * curves: [{index, name, points: [{value, standard_error} | null], details: [detail | null]}];
 * references: name to the number among a detail's scales, drawn dashed, then dotted.
 */
export function bySweepFigure(curves, sweep, title, mark, references = {}) {
  const dashes = ["dash", "dot"];
  const referenceOf = ({ index, name, details }) => Object.entries(references).flatMap(([words, key], i) => {
    const values = details.map((detail) => detail?.scales?.[key] ?? null);
    if (values.every((value) => value === null)) return [];
    return [line(sweep.values, values, `${name}, ${words}`, variantColour(theme.name, index), {
      line: { dash: dashes[i], width: 1.3 },
      trace: { hovertemplate: "%{x:.4g}: %{y:.4g}<extra>%{fullData.name}</extra>" },
    })];
  });
  return {
    traces: curves.flatMap((curve) => [
      ...referenceOf(curve),
      marked({
        index: curve.index, name: curve.name, x: sweep.values,
        y: curve.points.map((one) => one?.value ?? null),
        error: curve.points.map((one) => one?.standard_error ?? 0),
        hover: "%{x:.4g} → %{y:.4g}",
      }),
    ]),
    layout: sweepLayout(sweep, mark, axis(title, { rangemode: "tozero", zeroline: false })),
  };
}

/** Both errors of C12(0); curves: [{index, name, points: [summary | null]}] */
export function errorsFigure(curves, sweep, mark) {
  const of = (points, key) => points.map((one) => (one?.[key] > 0 ? one[key] : null));
  return {
    traces: curves.flatMap(({ index, name, points }) => {
      const colour = variantColour(theme.name, index);
      const drawn = (key, words, symbol, dash) => ({
        x: sweep.values, y: of(points, key), name: `${name}, ${words}`,
        mode: "lines+markers",
        line: { color: colour, width: 1.5, dash },
        marker: { color: colour, size: 7, symbol },
        hovertemplate: "%{x:.4g} → %{y:.2e}<extra>%{fullData.name}</extra>",
      });
      return [
        drawn("standard_error", "standard error", variantMarker(index), "solid"),
        drawn("discretization_error", "discretization error", `${variantMarker(index)}-open`, "dot"),
      ];
    }),
    layout: sweepLayout(sweep, mark, axis("Error of C12(0)", { type: "log", exponentformat: "power", dtick: 1 })),
  };
}
