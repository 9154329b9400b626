// An evolution map over time × distance, drawn on a canvas that serves the plot as its background
// image: axes, zoom and hover stay the plotting library's, at a fraction of its redraw cost.

import { CONTRAST_MAP, INTENSITY_MAPS, scaleOf } from "../model/colour.js";
import { isIntensity, nearest } from "../model/evolution.js";
import { brief } from "../model/quantities.js";
import { csv, saveText } from "./export.js";
import { axis, Surface } from "./surface.js";
import { token } from "./theme.js";

const KINDS = [
  { title: "Contrast", colours: CONTRAST_MAP, intervalMs: 80 },
  { title: "I1 (mW)", colours: INTENSITY_MAPS[0], intervalMs: 400 },
  { title: "I2 (mW)", colours: INTENSITY_MAPS[1], intervalMs: 400 },
  { title: "S2/S0", colours: CONTRAST_MAP, intervalMs: 400 },
  { title: "S3/S0", colours: CONTRAST_MAP, intervalMs: 400 },
];

// Peaks of thermal light reach far above its mean: the top colour stands for half the full scale
// and above, so that the mean does not drown in black. The colour bar says ≥ there.
const INTENSITY_CEILING = 0.5;

/** Colours as 32-bit words in the byte order of a canvas; the last one is reached at the ceiling. */
function words(colours, ceiling) {
  const table = new Uint8Array(4 * 256);
  for (let i = 0; i < 256; i += 1) {
    table.set([...colours[Math.min(255, Math.round(i / ceiling))], 255], 4 * i);
  }
  return new Uint32Array(table.buffer);
}

/** Outer edges of cells that have these centres. */
export function edges(centres) {
  const half = centres.length > 1 ? (centres[1] - centres[0]) / 2 : 0.5;
  return [centres[0] - half, centres.at(-1) + half];
}

export class EvolutionPlot {
  #canvas = document.createElement("canvas");
  #painted = new Uint8Array(0);
  #map = null;
  #times = null;
  #distances = null;
  #markKm = null;
  #timer = null;
  #span = null;

  /**
   * plane: 0 contrast, 1 and 2 the intensities, 3 and 4 the other Stokes ratios; readout: element
   * that tells what is under the pointer.
   */
  constructor(element, plane, readout) {
    this.#choose(plane);
    this.surface = new Surface(element);
    this.readout = readout;
    this.zoomed = () => {};
    this.surface.afterFirst.push(() => this.#listen(element));
  }

  /** Show a map (an Evolution) on its axes; markKm is the distance selected. */
  show(map, times, distances, markKm) {
    const fresh = map !== this.#map || times !== this.#times || distances !== this.#distances ||
      markKm !== this.#markKm;
    if (map !== this.#map) {
      this.#canvas.width = map.columns;
      this.#canvas.height = map.rows;
      this.#painted = new Uint8Array(map.rows);
    }
    this.#map = map;
    this.#times = times;
    this.#distances = distances;
    this.#markKm = markKm;
    if (fresh || !this.surface.ready || map.scale !== this.scaleShown) {
      this.#paint();
      this.surface.draw(() => this.#figure());
    }
  }

  /** Show another quantity of the map. */
  set layer(plane) {
    this.#choose(plane);
    this.#painted.fill(0);
    if (!this.#map) return;
    this.#canvas.width = this.#map.columns;
    this.#paint();
    this.surface.draw(() => this.#figure());
  }

  #choose(plane) {
    this.plane = plane;
    this.kind = KINDS[plane];
    this.words = words(this.kind.colours, isIntensity(plane) ? INTENSITY_CEILING : 1);
  }

  /** Save the quantity shown as a CSV file: a row for each distance, a column for each time. */
  saveData(filename, comments) {
    if (!this.#map) return;
    const unit = isIntensity(this.plane) ? 1e3 : 1;
    const rows = this.#distances.map((km, row) => [km, ...this.#times.map((_, column) => {
      const value = this.#map.at(this.plane, row, column);
      return value === null ? null : Number((unit * value).toPrecision(4));
    })]);
    const heads = ["distance (km) \\ time (ps)", ...this.#times];
    const said = [...comments, `values: ${this.kind.title}`];
    saveText(csv(said, heads, rows), `${filename}.csv`, "text/csv");
  }

  /** The stretch of time in view, [from, to] in ps. */
  set span(span) {
    this.#span = span;
    if (this.#map) this.surface.draw(() => this.#figure());
  }

  /** Rows have been added to the map shown. */
  grow() {
    this.#timer ??= setTimeout(() => {
      this.#timer = null;
      if (this.#map && this.#paint()) this.surface.image(0, this.#canvas.toDataURL());
      if (this.#map && this.#map.scale !== this.scaleShown) this.surface.draw(() => this.#figure());
    }, this.kind.intervalMs);
  }

  /** Paint rows that are new; whether there were any. The launch is at the bottom. */
  #paint() {
    const { rows, columns, filled, data, scale } = this.#map;
    const context = this.#canvas.getContext("2d");
    let changed = false;
    if (scale !== this.scalePainted) this.#painted.fill(0);
    if (this.plane >= this.#map.planes) return false;
    this.scalePainted = scale;
    for (let row = 0; row < rows; row += 1) {
      if (this.#painted[row] === filled[row]) continue;
      const image = context.createImageData(columns, 1);
      const pixels = new Uint32Array(image.data.buffer);
      const start = (this.plane * rows + row) * columns;
      for (let i = 0; i < columns; i += 1) pixels[i] = this.words[data[start + i]];
      context.putImageData(image, 0, rows - 1 - row);
      this.#painted[row] = filled[row];
      changed = true;
    }
    return changed;
  }

  #figure() {
    const [times, distances] = [this.#times, this.#distances];
    const [t0, t1] = edges(times);
    const [z0, z1] = edges(distances);
    const limits = { range: this.#span ?? [t0, t1], minallowed: t0, maxallowed: t1 };
    const ceilingMw = 255e3 * INTENSITY_CEILING * this.#map.scale || 1;
    const bounds = isIntensity(this.plane) ? [0, ceilingMw] : [-1, 1];
    this.scaleShown = this.#map.scale;
    const corners = {
      type: "heatmap", x: [t0, t1], y: [z0, z1], z: [[0, 0], [0, 0]],
      opacity: 0, showscale: false, hoverinfo: "none",
    };
    const bar = {
      type: "scatter", mode: "markers", x: [null], y: [null], hoverinfo: "skip", showlegend: false,
      marker: {
        color: [0], cmin: bounds[0], cmax: bounds[1], showscale: true,
        colorscale: scaleOf(this.kind.colours),
        colorbar: {
          thickness: 10, outlinewidth: 0, ticks: "outside", ticklen: 3, xpad: 6, ...this.#ticks(bounds),
          title: { text: this.kind.title, side: "right" },
        },
      },
    };
    return {
      traces: [corners, bar],
      layout: {
        margin: { l: 50, r: 78, t: 10, b: 38 },
        xaxis: axis("Time (ps)", { ...limits, showgrid: false, zeroline: false }),
        yaxis: axis("Distance (km)", {
          range: [distances[0], distances.at(-1)], nticks: 5, showgrid: false, zeroline: false,
        }),
        plot_bgcolor: token("--unwritten"),
        images: [{
          source: this.#canvas.toDataURL(), xref: "x", yref: "y", x: t0, y: z1,
          sizex: t1 - t0, sizey: z1 - z0, sizing: "stretch", layer: "below",
        }],
        shapes: this.#markKm === null ? [] : [{
          type: "line", xref: "paper", x0: 0, x1: 1, y0: this.#markKm, y1: this.#markKm,
          line: { color: token("--cursor"), width: 1, dash: "dot" },
        }],
      },
    };
  }

  #ticks([low, high]) {
    const tickvals = [0, 0.25, 0.5, 0.75, 1].map((share) => low + share * (high - low));
    const ticktext = tickvals.map((value) => brief(value, 2));
    if (isIntensity(this.plane)) ticktext[4] = `≥${ticktext[4]}`;
    return { tickmode: "array", tickvals, ticktext };
  }

  #listen(element) {
    element.on("plotly_hover", (event) => this.#tell(event.xvals?.[0], event.yvals?.[0]));
    element.on("plotly_unhover", () => { this.readout.textContent = ""; });
    element.on("plotly_relayout", (change) => {
      const keys = Object.keys(change);
      if (keys.some((key) => /^[xy]axis\.(range|autorange)/.test(key))) this.zoomed(change);
    });
  }

  #tell(time, distance) {
    if (!Number.isFinite(time) || !Number.isFinite(distance)) return;
    const [times, distances] = [this.#times, this.#distances];
    const row = nearest(distances, distance);
    const column = nearest(times, time);
    const values = [0, 1, 2].map((plane) => this.#map.at(plane, row, column));
    const place = `${brief(times[column])} ps, ${brief(distances[row], 3)} km`;
    this.readout.textContent =
      values[0] === null
        ? place
        : `${place}: contrast ${brief(values[0], 2)}, ` +
          `I1 ${brief(1e3 * values[1], 3)} mW, I2 ${brief(1e3 * values[2], 3)} mW`;
  }
}
