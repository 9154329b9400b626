// One plot on the page: loads the library when first needed, redraws at a bounded rate and only
// while in sight, follows the theme and its box, and exports itself.

import { csvOfFigure, saveText, wrapped } from "./export.js";
import { theme, token } from "./theme.js";

let library = null;

/** The plotting library, loaded once; the page's own parts do not wait for it. */
export function plotly() {
  library ??= new Promise((resolve, reject) => {
    const script = document.createElement("script");
    script.src = document.documentElement.dataset.plotly;
    script.onload = () => resolve(window.Plotly);
    script.onerror = () => reject(new Error("The plotting library did not load: reload the page."));
    document.head.append(script);
  });
  return library;
}

// The solver's workers share the machine with this page: a plot rests in proportion to its cost.
const REST_FOR_WORK = 8;

const CONFIG = { displayModeBar: false, responsive: false, doubleClick: "reset" };

const DRAWING = { width: 900, height: 560 };
// Words under a drawing: where they begin below the axis, and how far apart the lines are.
const FOOT = { top: 58, line: 13.5, size: 10 };

const escaped = (text) => text.replaceAll("&", "&amp;").replaceAll("<", "&lt;");

export function axis(title, more = {}) {
  return {
    title: { text: title, standoff: 6 },
    gridcolor: token("--grid"),
    linecolor: token("--axis"),
    tickcolor: token("--axis"),
    zerolinecolor: token("--zero"),
    ticks: "outside",
    ticklen: 4,
    showline: true,
    automargin: true,
    minexponent: 4,
    ...more,
  };
}

/** How an axis of a sweep is scaled: a logarithmic one is marked at 1, 2 and 5. */
export const scaleOfSweep = ({ logarithmic }) =>
  (logarithmic ? { type: "log", dtick: "D2" } : { type: "linear" });

function baseLayout() {
  return {
    paper_bgcolor: "rgba(0,0,0,0)",
    plot_bgcolor: token("--plot"),
    font: { family: token("--font"), size: 12, color: token("--ink-2") },
    margin: { l: 52, r: 10, t: 8, b: 40 },
    showlegend: false,
    hovermode: "closest",
    hoverlabel: { bgcolor: token("--panel"), bordercolor: token("--axis"), font: { color: token("--ink") } },
  };
}

export class Surface {
  #pending = null;
  #drawn = null;
  #timer = null;
  #last = 0;
  #inSight = false;
  #busy = false;
  #cost = 0;
  #zoom = 0;

  /** element: the box; intervalMs: the shortest time between two redraws. */
  constructor(element, { intervalMs = 250 } = {}) {
    this.element = element;
    this.intervalMs = intervalMs;
    this.afterFirst = [];
    new IntersectionObserver((entries) => {
      this.#inSight = entries.at(-1).isIntersecting;
      this.#schedule();
    }).observe(element);
    new ResizeObserver(() => this.#redrawKept()).observe(element);
    theme.addEventListener("change", () => this.#redrawKept());
    theme.addEventListener("print", () => this.#printNow());
  }

  /** make() returns {traces, layout}; it is called when the plot is really drawn. */
  draw(make) {
    this.#pending = make;
    delete this.element.dataset.instead;
    this.#schedule();
  }

  /** Show a sentence in place of a plot. */
  clear(text) {
    this.element.dataset.instead = text;
    this.#pending = null;
    if (this.#drawn) window.Plotly.purge(this.element);
    this.#drawn = null;
  }

  get ready() {
    return Boolean(this.#drawn);
  }

  #redrawKept() {
    this.#pending ??= this.#drawn;
    this.#schedule();
  }

  #schedule() {
    if (!this.#pending || !this.#inSight || this.#timer || this.#busy) return;
    const pause = Math.max(this.intervalMs, REST_FOR_WORK * this.#cost);
    const wait = Math.max(0, this.#last + pause - performance.now());
    this.#timer = setTimeout(() => {
      this.#timer = null;
      requestAnimationFrame(() => this.#flush());
    }, wait);
  }

  async #flush() {
    if (!this.#pending || this.#busy) return;
    const { width, height } = this.element.getBoundingClientRect();
    if (!width || !height) return;
    this.#busy = true;
    const first = !this.#drawn;
    const begun = performance.now();
    this.#drawn = this.#pending;
    this.#pending = null;
    delete this.element.dataset.instead;
    try {
      const library = await plotly();
      if (!this.#drawn) return;
      await this.#react(library, width, height);
      if (first) for (const act of this.afterFirst) act(library);
    } catch (failure) {
      this.element.textContent = failure.message;
    } finally {
      this.#last = performance.now();
      this.#cost = first ? 0 : this.#last - begun;
      this.#busy = false;
      this.#schedule();
    }
  }

  #react(library, width, height) {
    const { traces, layout } = this.#drawn();
    const size = { uirevision: this.#zoom, width, height };
    return library.react(this.element, traces, { ...baseLayout(), ...size, ...layout }, CONFIG);
  }

  /** Draw at once and in or out of sight: a page being printed waits for nobody. */
  #printNow() {
    const { width, height } = this.element.getBoundingClientRect();
    this.#drawn = this.#pending ?? this.#drawn;
    this.#pending = null;
    if (this.#drawn && window.Plotly && width) this.#react(window.Plotly, width, height);
  }

  /** Replace the source of layout image i, without a full redraw. */
  async image(i, source) {
    if (this.#drawn && !this.#busy) {
      await (await plotly()).relayout(this.element, { [`images[${i}].source`]: source });
    }
  }

  async relayout(change) {
    if (this.#drawn) await (await plotly()).relayout(this.element, change);
  }

  /** Save exactly what is drawn as a CSV file under comment lines. */
  saveData(filename, comments) {
    if (this.#drawn) saveText(csvOfFigure(this.#drawn(), comments), `${filename}.csv`, "text/csv");
  }

  /** Save the plot as it stands as an SVG file, with a legend and sentences printed under it. */
  async save(filename, foot = []) {
    if (!this.#drawn) return;
    const library = await plotly();
    const { traces, layout } = this.#drawn();
    const lines = wrapped(foot);
    const height = DRAWING.height + FOOT.line * lines.length;
    const named = traces.some(({ name }) => name) && !traces.every(({ type }) => type === "heatmap");
    const copy = { ...baseLayout(), ...layout, showlegend: named, width: DRAWING.width, height };
    copy.paper_bgcolor = token("--panel");
    copy.margin = {
      ...copy.margin, l: Math.max(60, copy.margin.l), r: 20, t: layout.xaxis2 ? 60 : 24,
      b: FOOT.top + FOOT.line * lines.length + 8,
    };
    copy.legend = { orientation: "h", y: layout.xaxis2 ? 1.12 : 1.02, yanchor: "bottom", x: 0, font: { size: 12 } };
    copy.annotations = [{
      text: lines.map(escaped).join("<br>"), xref: "paper", yref: "paper", x: 0, y: 0, xanchor: "left", yanchor: "top",
      xshift: 12 - copy.margin.l, yshift: -FOOT.top, align: "left", showarrow: false, font: { size: FOOT.size },
    }];
    const file = { format: "svg", width: DRAWING.width, height, filename };
    await library.downloadImage({ data: traces, layout: copy }, file);
  }

  /** Undo every zoom. */
  resetAxes() {
    this.#zoom += 1;
    this.#redrawKept();
  }
}
