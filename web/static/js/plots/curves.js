// The plots of one sweep point: correlations, spectra, contrast, domain durations.

import { componentColours, variantColour } from "../model/colour.js";
import { axis } from "./surface.js";
import { theme, token } from "./theme.js";
import { band, corner, DASHED, faded, line, marked, withErrors } from "./traces.js";

function correlationTraces(lag, curve, name, colour) {
  return [
    band(lag, curve.value, curve.standard_error, colour),
    ...(curve.linear ? [line(lag, curve.linear, `${name}, linear regime`, colour, {
      line: DASHED,
      trace: { showlegend: false, hovertemplate: "%{y:.4f}<extra>%{fullData.name}</extra>" },
    })] : []),
    line(lag, curve.value, name, colour, {
      trace: {
        ...withErrors(curve.standard_error),
        hovertemplate: "%{x:.4g} ps: %{y:.4f}<extra>%{fullData.name}</extra>",
      },
    }),
  ];
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

export function contrastFigure(axes, shown) {
  return {
    traces: shown.flatMap(({ index, name, detail }) => {
      const colour = variantColour(theme.name, index);
      const { density, standard_error: error } = detail.contrast;
      return [
        band(axes.contrast, density, error, colour, 0),
        line(axes.contrast, density, name, colour, {
          trace: {
            ...withErrors(error),
            hovertemplate: "%{x:.2f}: %{y:.3f}<extra>%{fullData.name}</extra>",
          },
        }),
      ];
    }),
    layout: {
      xaxis: axis("Contrast (I1 − I2)/(I1 + I2)", { range: [-1, 1], zeroline: false }),
      yaxis: axis("Probability density", { rangemode: "tozero", zeroline: false }),
    },
  };
}

/** Autocorrelation of the contrast. */
export function memoryFigure(axes, shown) {
  return {
    traces: shown.flatMap(({ index, name, detail }) =>
      correlationTraces(axes.lag_ps, detail.contrast_correlation, name, variantColour(theme.name, index)),
    ),
    layout: { xaxis: lagAxis(), yaxis: axis("Autocorrelation of the contrast", { zeroline: true }) },
  };
}

export function durationsFigure(axes, shown) {
  const positive = (values) => values.map((y) => (y > 0 ? y : null));
  const levels = shown.flatMap(({ detail }) => detail.durations.density.filter((y) => y > 0));
  const range = levels.length
    ? [Math.log10(Math.min(...levels)) - 0.4, Math.log10(Math.max(...levels)) + 0.3]
    : undefined;
  return {
    traces: shown.map(({ index, name, detail }) => marked({
      index, name, x: axes.duration_ps, y: positive(detail.durations.density),
      error: detail.durations.standard_error, size: 5,
      hover: "%{x:.4g} ps: %{y:.2e} /ps",
    })),
    layout: {
      xaxis: axis("Domain duration (ps)", { zeroline: false, rangemode: "tozero" }),
      yaxis: axis("Probability density (1/ps)", { type: "log", range, exponentformat: "power", dtick: 1 }),
    },
  };
}
