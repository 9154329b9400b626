// The plots against distance, and the maps of C12(0) over what was varied.

import { componentColours, CONTRAST_MAP, scaleOf } from "../model/colour.js";
import { axis, scaleOfSweep } from "./surface.js";
import { theme, token } from "./theme.js";
import { corner, line, marked, withErrors } from "./traces.js";

const distanceAxis = () => axis("Distance (km)", { zeroline: false });

const cursor = (km) => [{
  type: "line", x0: km, x1: km, yref: "paper", y0: 0, y1: 1, layer: "below",
  line: { color: token("--cursor"), width: 1, dash: "dot" },
}];

/** shown: [{index, name, distances, curve: {value, standard_error}}]; markKm: the distance selected. */
export function alongFigure(shown, title, markKm, { digits = ".4f", zero = false } = {}) {
  return {
    traces: shown.map(({ index, name, distances, curve }) => marked({
      index, name, x: distances, y: curve.value, error: curve.standard_error,
      hover: `%{x:.4g} km: %{y:${digits}}`,
    })),
    layout: {
      xaxis: distanceAxis(),
      yaxis: axis(title, zero ? { rangemode: "tozero", zeroline: true, zerolinewidth: 1.5 } : { zeroline: false }),
      shapes: cursor(markKm),
    },
  };
}

/** Both components of one variant against distance; pair: their two curves. */
export function componentsFigure(distances, pair, title, markKm, { scale = 1, digits = ".4g", level = null } = {}) {
  const scaled = (values) => values.map((value) => (value === null ? null : scale * value));
  const traces = pair.map((curve, i) => {
    const errors = scaled(curve.standard_error);
    const colour = componentColours(theme.name)[i];
    return {
      ...line(distances, scaled(curve.value), `component ${i + 1}`, colour, { line: { dash: i ? "dot" : "solid" } }),
      error_y: { type: "data", array: errors, color: colour, thickness: 1.4, width: 3 },
      ...withErrors(errors),
      hovertemplate: `%{x:.4g} km: %{y:${digits}}<extra>%{fullData.name}</extra>`,
    };
  });
  if (level) {
    traces.push(line([distances[0], distances.at(-1)], [level.value, level.value], level.name, token("--ink-2"), {
      line: { dash: "dash", width: 1.2 },
    }));
  }
  return {
    traces,
    layout: {
      xaxis: distanceAxis(),
      yaxis: axis(title, { rangemode: level ? "normal" : "tozero", zeroline: false }),
      shapes: cursor(markKm),
      ...corner(),
    },
  };
}

/** C12(0) as a map; rows: for each sweep point its values up the other axis, or null. */
function mapFigure(sweep, places, rows, yaxis, unit) {
  const z = places.map((_, i) => rows.map((row) => row?.[i] ?? null));
  const most = Math.max(0.1, ...z.flat().map((value) => Math.abs(value ?? 0)));
  return {
    traces: [{
      type: "heatmap", name: "C12(0)", x: sweep.values, y: places, z,
      zmin: -most, zmax: most, colorscale: scaleOf(CONTRAST_MAP), hoverongaps: false,
      colorbar: { title: { text: "C12(0)", side: "right" }, thickness: 12, outlinewidth: 0 },
      hovertemplate: `%{x:.4g}, %{y:.4g} ${unit}: %{z:.4f}<extra></extra>`,
    }],
    layout: {
      xaxis: axis(sweep.title, { ...scaleOfSweep(sweep), showgrid: false }),
      yaxis: { ...yaxis, showgrid: false, zeroline: false },
      plot_bgcolor: token("--unwritten"),
    },
  };
}

/** Over the sweep and the distance; places: km, or shares of lines that differ in length. */
export function overviewFigure(places, sweep, rows, { shares }) {
  const title = shares ? "Share of the line" : "Distance (km)";
  return mapFigure(sweep, places, rows, axis(title), shares ? "of the line" : "km");
}

/** Over both sweeps; rows: for each point of the first its values over the second. */
export function surfaceFigure(sweep, second, rows) {
  return mapFigure(sweep, second.values, rows, axis(second.title, scaleOfSweep(second)), second.unit);
}
