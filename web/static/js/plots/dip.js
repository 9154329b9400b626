// C12(0) against the swept parameter: the plot that a study is run for.

import { variantColour, variantMarker } from "../model/colour.js";
import { axis, scaleOfSweep } from "./surface.js";
import { theme, token } from "./theme.js";

/** How a point is marked: filled when settled, open while provisional, dotted when capped. */
function symbolOf(shape, summary) {
  if (!summary.final) return `${shape}-open`;
  return summary.target_met ? shape : `${shape}-open-dot`;
}

const drawable = (summary) => summary !== null && summary.outcome === "completed" && summary.value !== null;

/** What limits a point: what the server says, else the larger of the two errors. */
export function limitOf({ limited_by: said, standard_error: chance, discretization_error: steps }) {
  if (said !== undefined) return said;
  if (chance === null || steps === null) return "";
  return steps > chance ? "steps" : "statistics";
}

const limitText = (summary) => (limitOf(summary) ? `<br>limited by ${limitOf(summary)}` : "");

function valueTraces(curve) {
  const colour = variantColour(theme.name, curve.index);
  const shape = variantMarker(curve.index);
  const shown = curve.points.map((one) => (drawable(one) ? one : null));
  const group = { legendgroup: String(curve.index), xaxis: curve.xaxis ?? "x" };
  const y = shown.map((one) => one?.value ?? null);
  const bars = (key, thickness, width) => ({
    type: "data",
    array: shown.map((one) => one?.[key] ?? 0),
    thickness,
    width,
    color: colour,
  });
  return [
    {
      ...group,
      x: curve.x,
      y: shown.map((one) => one?.linear ?? null),
      name: `${curve.name}, linear regime`,
      mode: "lines+markers",
      line: { color: colour, width: 1.4, dash: "dash" },
      marker: { symbol: "line-ew-open", size: 9, color: colour, line: { width: 1.4, color: colour } },
      showlegend: false,
      hovertemplate: "linear regime %{y:.4f}<extra>%{fullData.name}</extra>",
    },
    {
      ...group,
      x: curve.x,
      y,
      mode: "markers",
      marker: { size: 1, opacity: 0 },
      error_y: bars("discretization_error", 1, 9),
      showlegend: false,
      hoverinfo: "skip",
    },
    {
      ...group,
      x: curve.x,
      y,
      name: curve.name,
      mode: "lines+markers",
      line: { color: colour, width: 1.6 },
      marker: {
        color: colour,
        size: 9,
        symbol: shown.map((one) => (one ? symbolOf(shape, one) : shape)),
        line: { color: colour, width: 1.6 },
      },
      error_y: bars("standard_error", 2.4, 4),
      meta: {
        columns: {
          "standard error": shown.map((one) => one?.standard_error ?? null),
          "discretization error": shown.map((one) => one?.discretization_error ?? null),
          "limited by": shown.map((one) => one && limitOf(one)),
        },
      },
      customdata: shown.map((one) => [
        one?.standard_error ?? 0, one?.discretization_error ?? 0, one?.realizations ?? 0,
        one ? limitText(one) : "",
      ]),
      hovertemplate:
        "%{x:.4g} → %{y:.4f}<br>standard error %{customdata[0]:.4f}<br>" +
        "discretization error %{customdata[1]:.1e}<br>%{customdata[2]} realizations" +
        "%{customdata[3]}<extra>%{fullData.name}</extra>",
    },
  ];
}

function flagTrace(curve) {
  const flagged = curve.points.flatMap((one, i) =>
    one && one.outcome !== "completed" ? [{ x: curve.x[i], one }] : [],
  );
  if (!flagged.length) return [];
  return [{
    x: flagged.map(({ x }) => x),
    y: flagged.map(() => 0.04),
    xaxis: curve.xaxis ?? "x",
    yaxis: "y2",
    mode: "markers",
    name: `${curve.name}, flagged`,
    marker: {
      symbol: "triangle-up-open", size: 12, color: token("--warn"),
      line: { width: 2, color: variantColour(theme.name, curve.index) },
    },
    text: flagged.map(({ one }) => `${one.outcome.replaceAll("_", " ")}: ${one.advice}`),
    hovertemplate: "%{text}<extra>%{fullData.name}</extra>",
    showlegend: false,
  }];
}

/**
 * curves: [{name, index, x, points: [summary|null], xaxis?}]; sweep: as sweepAxis() gives it;
 * top: a second sweep axis, for curves whose xaxis is "x2"; mark: x of the point selected.
 */
export function dipFigure({ curves, sweep, top = null, mark = null, where = "" }) {
  const traces = curves.flatMap((curve) => [...valueTraces(curve), ...flagTrace(curve)]);
  const scale = (values) => ({ ...scaleOfSweep(values), zeroline: false });
  const layout = {
    xaxis: axis(sweep.title, scale(sweep)),
    yaxis: axis(`C12(0)${where}`, {
      rangemode: "tozero", zeroline: true, zerolinewidth: 1.5,
      range: curves.some(({ points }) => points.some(drawable)) ? undefined : [-0.5, 0.5],
    }),
    yaxis2: { overlaying: "y", range: [0, 1], visible: false, fixedrange: true },
    shapes: mark === null ? [] : [{
      type: "line", x0: mark, x1: mark, yref: "paper", y0: 0, y1: 1, layer: "below",
      line: { color: token("--cursor"), width: 1, dash: "dot" },
    }],
  };
  if (top) {
    layout.xaxis2 = axis(top.title, { ...scale(top), overlaying: "x", side: "top", showgrid: false });
    layout.margin = { l: 52, r: 10, t: 44, b: 40 };
  }
  return { traces, layout };
}
