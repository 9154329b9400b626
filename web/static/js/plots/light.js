// How the light fluctuates: intensities and field quadratures beside what thermal light does.

import { componentColours, variantColour } from "../model/colour.js";
import { axis } from "./surface.js";
import { theme, token } from "./theme.js";
import { band, corner, DASHED, line, withErrors } from "./traces.js";

const positive = (values) => values.map((y) => (y > 0 ? y : null));

/** Range of a logarithmic axis over the densities that are there. */
function decades(curves) {
  const levels = curves.flat().filter((y) => y > 0);
  return levels.length ? [Math.log10(Math.min(...levels)) - 0.3, Math.log10(Math.max(...levels)) + 0.3] : undefined;
}

const densityAxis = (range) =>
  axis("Probability density", { type: "log", range, exponentformat: "power", dtick: 1 });

/** Intensities of both components and of their sum over their means, for one variant. */
export function intensityFigure(axes, { intensities }) {
  const [one, two] = componentColours(theme.name);
  const x = axes.relative_intensity;
  const shown = [
    ["intensity1", "component 1", one], ["intensity2", "component 2", two], ["intensity_sum", "sum", token("--ink-2")],
  ];
  const reference = (name, dash, key) => line(x, intensities[key].reference, name, token("--axis"), {
    line: { dash, width: 1.4 }, trace: { hoverinfo: "skip" },
  });
  return {
    traces: [
      reference("exponential", "dash", "intensity1"),
      reference("thermal sum", "dot", "intensity_sum"),
      ...shown.map(([key, name, colour]) => line(x, positive(intensities[key].density), name, colour, {
        trace: {
          ...withErrors(intensities[key].standard_error),
          error_y: {
            type: "data", array: intensities[key].standard_error, color: colour, thickness: 0.8, width: 0,
          },
          hovertemplate: "%{x:.3g} × mean: %{y:.3g}<extra>%{fullData.name}</extra>",
        },
      })),
    ],
    layout: {
      xaxis: axis("Intensity over its mean", { zeroline: false, rangemode: "tozero" }),
      yaxis: densityAxis(decades(shown.map(([key]) => intensities[key].density))),
      ...corner(),
    },
  };
}

/** Field quadratures over their standard deviation; shown: [{index, name, detail}]. */
export function quadratureFigure(axes, shown) {
  const x = axes.quadrature;
  return {
    traces: [
      line(x, shown[0].detail.quadratures.reference, "Gaussian", token("--axis"), {
        line: DASHED, trace: { hoverinfo: "skip" },
      }),
      ...shown.flatMap(({ index, name, detail }) => {
        const colour = variantColour(theme.name, index);
        const { density, standard_error: error } = detail.quadratures;
        return [
          band(x, density, error, colour, 0),
          line(x, density, name, colour, {
            trace: { ...withErrors(error), hovertemplate: "%{x:.2f}: %{y:.3f}<extra>%{fullData.name}</extra>" },
          }),
        ];
      }),
    ],
    layout: {
      xaxis: axis("Quadrature over its standard deviation", { zeroline: false }),
      yaxis: axis("Probability density", { rangemode: "tozero", zeroline: false }),
    },
  };
}
