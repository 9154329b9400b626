// The plots of one sweep point: correlations, spectra, distance, contrast, domain durations.

import { componentColours, CONTRAST_MAP, scaleOf, variantColour, variantMarker } from "../model/colour.js";
import { axis, scaleOfSweep } from "./surface.js";
import { theme, token } from "./theme.js";

const faded = (hex, alpha) =>
  `rgba(${[1, 3, 5].map((i) => parseInt(hex.slice(i, i + 2), 16)).join(",")},${alpha})`;

/** A standard error as a shaded band around a curve. */
function band(x, value, error, colour, floor = -Infinity) {
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

function line(x, y, name, colour, more = {}) {
  return { x, y, name, mode: "lines", line: { color: colour, width: 1.8, ...more.line }, ...more.trace };
}

const dashed = { line: { dash: "dash", width: 1.3 } };

function correlationTraces(lag, curve, name, colour) {
  return [
    band(lag, curve.value, curve.standard_error, colour),
    line(lag, curve.linear, `${name}, linear regime`, colour, {
      line: dashed.line,
      trace: { showlegend: false, hovertemplate: "%{y:.4f}<extra>%{fullData.name}</extra>" },
    }),
    line(lag, curve.value, name, colour, {
      trace: { hovertemplate: "%{x:.4g} ps: %{y:.4f}<extra>%{fullData.name}</extra>" },
    }),
  ];
}

/** A small key in the upper right corner, for curves that the page's legend does not name. */
function corner() {
  const key = { x: 1, xanchor: "right", y: 1, bgcolor: "rgba(0,0,0,0)", font: { size: 10 }, itemwidth: 30 };
  return { showlegend: true, legend: key };
}

const lagAxis = () => axis("Lag τ (ps)", { zeroline: true });

export function autoFigure(axes, detail) {
  const [one, two] = componentColours(theme.name);
  const { auto1, auto2, sum } = detail.correlations;
  return {
    traces: [
      ...correlationTraces(axes.lag_ps, sum, "sum", token("--ink-2")),
      ...correlationTraces(axes.lag_ps, auto1, "component 1", one),
      ...correlationTraces(axes.lag_ps, auto2, "component 2", two),
    ],
    layout: { xaxis: lagAxis(), yaxis: axis("Autocorrelation", { zeroline: true }), ...corner() },
  };
}

/** shown: [{index, name, detail}], one for each variant to compare. */
export function crossFigure(axes, shown) {
  return {
    traces: shown.flatMap(({ index, name, detail }) =>
      correlationTraces(axes.lag_ps, detail.correlations.cross, name, variantColour(theme.name, index)),
    ),
    layout: { xaxis: lagAxis(), yaxis: axis("C12(τ)", { zeroline: true, zerolinewidth: 1.5 }) },
  };
}

const RANGE_DB = 70;

export function spectraFigure(axes, detail) {
  const colours = componentColours(theme.name);
  const decibels = (values) => values.map((w) => (w > 0 ? 10 * Math.log10(1e3 * w) : null));
  const traces = [];
  let top = -Infinity;
  for (const [kind, width, alpha] of [["input", 1.2, 0.45], ["output", 2, 1]]) {
    for (const component of [1, 2]) {
      const y = decibels(detail.spectra[`${kind}${component}`].value);
      top = y.reduce((most, level) => (level !== null && level > most ? level : most), top);
      traces.push(line(axes.offset_ghz, y, `${kind} ${component}`, faded(colours[component - 1], alpha), {
        line: { width, dash: component === 2 ? "dot" : "solid" },
        trace: { hovertemplate: "%{x:.4g} GHz: %{y:.1f} dBm/GHz<extra>%{fullData.name}</extra>" },
      }));
    }
  }
  return {
    traces,
    layout: {
      xaxis: axis("Frequency offset (GHz)", { zeroline: false }),
      yaxis: axis("Spectral power (dBm/GHz)", {
        zeroline: false,
        range: Number.isFinite(top) ? [top - RANGE_DB, top + 4] : undefined,
      }),
      ...corner(),
    },
  };
}

/** shown: [{index, name, distances, summary}]; markKm: the distance selected. */
export function distanceFigure(shown, markKm) {
  return {
    traces: shown.map(({ index, name, distances, summary }) => {
      const colour = variantColour(theme.name, index);
      return {
        x: distances,
        y: summary.along.value,
        name,
        mode: "lines+markers",
        line: { color: colour, width: 1.6 },
        marker: { color: colour, size: 6, symbol: variantMarker(index) },
        error_y: {
          type: "data", array: summary.along.standard_error, color: colour, thickness: 1.6, width: 3,
        },
        hovertemplate: "%{x:.4g} km: %{y:.4f}<extra>%{fullData.name}</extra>",
      };
    }),
    layout: {
      xaxis: axis("Distance (km)", { zeroline: false }),
      yaxis: axis("C12(0)", { rangemode: "tozero", zeroline: true, zerolinewidth: 1.5 }),
      shapes: [{
        type: "line", x0: markKm, x1: markKm, yref: "paper", y0: 0, y1: 1, layer: "below",
        line: { color: token("--cursor"), width: 1, dash: "dot" },
      }],
    },
  };
}

/**
 * C12(0) over both at once; rows: for each sweep point its values along the line, or null;
 * places: distances in km, or shares of lines that differ in length.
 */
export function overviewFigure(places, sweep, rows, { shares }) {
  const z = places.map((_, i) => rows.map((row) => row?.[i] ?? null));
  const unit = shares ? "of the line" : "km";
  const most = Math.max(0.1, ...z.flat().map((value) => Math.abs(value ?? 0)));
  return {
    traces: [{
      type: "heatmap", x: sweep.values, y: places, z,
      zmin: -most, zmax: most, colorscale: scaleOf(CONTRAST_MAP), hoverongaps: false,
      colorbar: { title: { text: "C12(0)", side: "right" }, thickness: 12, outlinewidth: 0 },
      hovertemplate: `%{x:.4g}, %{y:.4g} ${unit}: %{z:.4f}<extra></extra>`,
    }],
    layout: {
      xaxis: axis(sweep.title, { ...scaleOfSweep(sweep), showgrid: false }),
      yaxis: axis(shares ? "Share of the line" : "Distance (km)", { showgrid: false, zeroline: false }),
      plot_bgcolor: token("--unwritten"),
    },
  };
}

export function contrastFigure(axes, shown) {
  return {
    traces: shown.flatMap(({ index, name, detail }) => {
      const colour = variantColour(theme.name, index);
      const { density, standard_error: error } = detail.contrast;
      return [
        band(axes.contrast, density, error, colour, 0),
        line(axes.contrast, density, name, colour, {
          trace: { hovertemplate: "%{x:.2f}: %{y:.3f}<extra>%{fullData.name}</extra>" },
        }),
      ];
    }),
    layout: {
      xaxis: axis("Contrast (I1 − I2)/(I1 + I2)", { range: [-1, 1], zeroline: false }),
      yaxis: axis("Probability density", { rangemode: "tozero", zeroline: false }),
    },
  };
}

export function durationsFigure(axes, shown) {
  const positive = (values) => values.map((y) => (y > 0 ? y : null));
  const levels = shown.flatMap(({ detail }) => detail.durations.density.filter((y) => y > 0));
  const range = levels.length
    ? [Math.log10(Math.min(...levels)) - 0.4, Math.log10(Math.max(...levels)) + 0.3]
    : undefined;
  return {
    traces: shown.map(({ index, name, detail }) => {
      const colour = variantColour(theme.name, index);
      return {
        x: axes.duration_ps,
        y: positive(detail.durations.density),
        name,
        mode: "lines+markers",
        line: { color: colour, width: 1.4 },
        marker: { color: colour, size: 5, symbol: variantMarker(index) },
        error_y: {
          type: "data", array: detail.durations.standard_error, color: colour, thickness: 1, width: 2,
        },
        hovertemplate: "%{x:.4g} ps: %{y:.2e} /ps<extra>%{fullData.name}</extra>",
      };
    }),
    layout: {
      xaxis: axis("Domain duration (ps)", { zeroline: false, rangemode: "tozero" }),
      yaxis: axis("Probability density (1/ps)", { type: "log", range, exponentformat: "power", dtick: 1 }),
    },
  };
}
