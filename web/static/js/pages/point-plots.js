// The plots of the point selected, topic by topic; each says what of a point it needs.

import { alongFigure, componentsFigure } from "../plots/along.js";
import { bySweepFigure, errorsFigure } from "../plots/by-sweep.js";
import { autoFigure, contrastFigure, crossFigure, durationsFigure, memoryFigure, spectraFigure } from "../plots/curves.js";
import { intensityFigure, quadratureFigure } from "../plots/light.js";
import { SpherePlot } from "../plots/sphere.js";
import { Surface } from "../plots/surface.js";
import { find, findAll } from "./elements.js";

const NOT_KEPT = "this run does not hold it";
const MEAN_SQUARE = "⟨I²⟩/⟨I⟩²";

/** Each variant shown against distance; pick(detail) is the curve. */
const eachAlong = (pick, title, options) => ({
  variants: pick,
  make: ({ km }, shown) =>
    alongFigure(shown.map((one) => ({ ...one, curve: pick(one.detail) })), title, km, options),
});

/** Both components of the variant chosen against distance. */
const bothAlong = (name, title, options) => ({
  own: (detail) => detail.evolution?.[`${name}1`],
  make: ({ km, distances }, { evolution }) => componentsFigure(
    distances, [1, 2].map((component) => evolution[`${name}${component}`]), title, km, options,
  ),
});

/**
 * One number of every point of each variant shown against the sweep; references: name of a curve
 * to hold it against, to the number in a point's scales.
 */
const eachBySweep = (pick, title, references = {}) => ({
  sweep: pick,
  make: ({ sweep, mark }, curves) => bySweepFigure(curves, sweep, title, mark, references),
});

/** variants, own, sweep: what the plot needs of a detail; how decides whose details are given. */
const PLOTS = {
  cross: { variants: (detail) => detail.correlations, make: ({ axes }, shown) => crossFigure(axes, shown) },
  auto: { own: (detail) => detail.correlations, make: ({ axes }, own) => autoFigure(axes, own) },
  memory: {
    variants: (detail) => detail.contrast_correlation, make: ({ axes }, shown) => memoryFigure(axes, shown),
  },
  spectra: { own: (detail) => detail.spectra, make: ({ axes }, own) => spectraFigure(axes, own) },
  distance: eachAlong((detail) => detail.distance, "C12(0)", { zero: true }),
  powers: bothAlong("power", "Mean power (mW)", { scale: 1e3 }),
  durations: { variants: (detail) => detail.durations, make: ({ axes }, shown) => durationsFigure(axes, shown) },
  "durations-along": eachAlong((detail) => detail.evolution?.duration_along, "Mean duration (ps)", { digits: ".4g" }),
  "walls-along": eachAlong((detail) => detail.evolution?.walls_along, "Walls (1/ns)", { digits: ".4g" }),
  "durations-sweep": eachBySweep((detail) => detail.mean_duration_ps, "Mean duration (ps)"),
  "walls-sweep": eachBySweep((detail) => detail.walls_per_ns, "Walls (1/ns)", {
    "thermal light": "thermal_walls_per_ns",
  }),
  "width-sweep": eachBySweep((detail) => detail.wall_width_ps, "Wall width (ps)", {
    "closed form": "wall_closed_form_ps", "thermal light": "thermal_wall_ps",
  }),
  contrast: { variants: (detail) => detail.contrast, make: ({ axes }, shown) => contrastFigure(axes, shown) },
  polarized: eachBySweep((detail) => detail.polarization?.received?.degree, "Degree of polarization"),
  intensity: { own: (detail) => detail.intensities, make: ({ axes }, own) => intensityFigure(axes, own) },
  quadrature: { variants: (detail) => detail.quadratures, make: ({ axes }, shown) => quadratureFigure(axes, shown) },
  moments: bothAlong("second_moment", MEAN_SQUARE, { digits: ".4f", level: { value: 2, name: "thermal light" } }),
};

export class PointPlots {
  constructor(root) {
    this.root = root;
    this.plots = {};
    for (const key of [...Object.keys(PLOTS), "errors"]) {
      this.plots[key] = new Surface(root.querySelector(`[data-plot="${key}"]`), { intervalMs: 500 });
    }
    this.sphere = new SpherePlot(root.querySelector('[data-plot="sphere"]'), find(root, "sphere-readout"));
    this.plots.sphere = this.sphere;
    for (const button of findAll(root, "face")) {
      button.addEventListener("click", () => this.sphere.face(button.dataset.face));
    }
  }

  /** Whether the plots of a topic need the details of every point of the sweep. */
  static needsSweep(topic) {
    return topic === "domains" || topic === "polarization";
  }

  /**
   * at: {run, axes, sweep, mark, km, distances, at, name, instead, own, shown: [{index, name,
   * distances, detail}], curves: [{index, name, details: [detail|null], summaries}]}
   */
  draw(at) {
    for (const [key, plot] of Object.entries(PLOTS)) this.#draw(key, plot, at);
    this.#note("errors", "of C12(0) at the end of the line");
    const errors = at.curves.map((curve) => ({ ...curve, points: curve.summaries }));
    this.plots.errors.draw(() => errorsFigure(errors, at.sweep, at.mark));
    this.#note("sphere", `${at.name} at ${at.at}`);
    if (at.own?.stokes?.density) this.sphere.show(at.own.stokes);
    else this.sphere.clear(at.own ? NOT_KEPT : at.instead);
  }

  #draw(key, { own, variants, sweep, make }, at) {
    this.#note(key, sweep ? "" : own ? `${at.name} at ${at.at}` : `at ${at.at}`);
    let given = null;
    let known = true;
    if (own) {
      known = Boolean(at.own);
      given = known && own(at.own) ? at.own : null;
    } else if (variants) {
      known = at.shown.length > 0;
      const having = at.shown.filter(({ detail }) => variants(detail));
      given = having.length ? having : null;
    } else {
      const curves = at.curves.map((curve) => ({
        ...curve, points: curve.details.map((detail) => (detail && sweep(detail)) ?? null),
      }));
      known = at.curves.some(({ details }) => details.some(Boolean));
      given = curves.some(({ points }) => points.some(Boolean)) ? curves : null;
    }
    if (given) this.plots[key].draw(() => make(at, given));
    else this.plots[key].clear(known ? NOT_KEPT : at.instead);
  }

  #note(panel, text) {
    find(this.root.querySelector(`[data-panel="${panel}"]`), "note").textContent = text;
  }
}
