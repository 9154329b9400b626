// The results of one run: maps, the dip curve, and the plots of the point selected.

import { Details } from "../model/details.js";
import { brief, sweepAxis } from "../model/quantities.js";
import * as figures from "../plots/curves.js";
import { dipFigure } from "../plots/dip.js";
import { edges, EvolutionPlot } from "../plots/evolution.js";
import { Surface } from "../plots/surface.js";
import { find, findAll } from "./elements.js";
import { Legend } from "./legend.js";
import { Selection } from "./selection.js";
import { fillReadout, fillRemarks, fillValues } from "./tables.js";
import { powerUnit } from "./shell.js";

const TABLES_MS = 500;
// Length of the maps' close-up, in inverse widths of the source: some hundred domains.
const CLOSE_UP_WIDTHS = 40;

export class Results {
  #run = null;
  #details = null;
  #mapShown = null;
  #tablesTimer = null;

  constructor(root) {
    this.root = root;
    const box = (key) => root.querySelector(`[data-plot="${key}"]`);
    const readout = find(root, "map-readout");
    this.maps = [0, 1, 2].map((plane) => new EvolutionPlot(box(`map-${plane}`), plane, readout));
    for (const map of this.maps) map.zoomed = (change) => this.#zoomTogether(map, change);
    this.plots = { dip: new Surface(box("dip"), { intervalMs: 300 }) };
    for (const key of ["cross", "auto", "spectra", "distance", "contrast", "durations", "overview", "difference"]) {
      this.plots[key] = new Surface(box(key), { intervalMs: 500 });
    }
    this.legend = new Legend(find(root, "legend"), () => this.#comparisonChanged());
    this.selection = new Selection(root, () => this.#selectionChanged());
    powerUnit.addEventListener("change", () => this.#run && this.#drawAll());
    this.differences = find(root, "differences");
    this.differences.addEventListener("toggle", () => this.#run && this.#drawDifferences());
    this.overview = find(root, "overview");
    this.overview.addEventListener("toggle", () => {
      if (this.#run) this.#drawOverview();
    });
    const whole = find(root, "whole-window");
    whole.addEventListener("change", () => this.#run && this.#frameMaps());
    for (const button of findAll(root, "save")) {
      button.addEventListener("click", () => this.#save(button.dataset.save));
    }
    for (const button of findAll(root, "reset")) {
      button.addEventListener("click", () => this.#resetAxes(button.dataset.reset));
    }
  }

  /** Show a run, or null for none. */
  show(run) {
    this.#details?.stop();
    this.#run = run;
    this.#mapShown = null;
    find(this.root, "empty").hidden = Boolean(run);
    find(this.root, "body").hidden = !run;
    if (!run) return;
    this.#details = new Details(run, (kind, variant, point) => this.#arrived(kind, variant, point));
    this.selection.open(run, this.sweep);
    this.legend.show(run.variants.map(({ name }) => name), this.selection.hidden);
    this.#frameMaps();
    this.#drawAll();
  }

  get sweep() {
    return sweepAxis(this.#run.axes.sweep, powerUnit.value);
  }

  /** The run has taken in an event. */
  took(type, changed) {
    if (type === "map") {
      const { variant, point } = this.#run.liveMap;
      if (this.#mapShown?.variant === variant && this.#mapShown?.point === point) {
        for (const plot of this.maps) plot.grow();
      } else this.#drawMaps();
    } else if (type === "point") {
      if (this.selection.following) this.#followCurve();
      this.#drawDip();
      this.#drawDifferences();
      this.#drawOverview();
      this.#details.stale();
      if (changed.some(({ has_map: has }) => has)) this.#drawMaps();
      this.#tablesSoon();
    } else if (type === "state") {
      this.selection.refresh();
      if (!this.#run.active) this.#details.hurry();
    }
  }

  /** Go along with the variant's curve as it gets further. */
  #followCurve() {
    const { variant } = this.selection;
    const furthest = this.#run.points[variant].findLastIndex((one) => one?.outcome === "completed");
    if (furthest >= 0) this.selection.move({ variant, point: furthest });
  }

  /** /view was read again. */
  renewed() {
    this.selection.refresh();
    this.#drawAll();
  }

  #arrived(kind, variant, point) {
    if (kind === "map") {
      if (this.#mapShown?.variant === variant && this.#mapShown?.point === point) {
        for (const plot of this.maps) plot.grow();
      }
      return;
    }
    this.#drawPoint();
  }

  #selectionChanged() {
    this.#drawDip();
    this.#drawDifferences();
    this.#drawOverview();
    this.#drawMaps();
    this.#drawPoint();
    this.#wantDetails();
  }

  #comparisonChanged() {
    this.selection.hidden = this.legend.hidden;
    this.selection.remember();
    this.#drawDip();
    this.#drawDifferences();
    this.#drawPoint();
    this.#wantDetails();
  }

  #drawAll() {
    this.selection.relabel(this.sweep);
    this.#drawMaps();
    this.#drawDip();
    this.#drawPoint();
    this.#drawDifferences();
    this.#drawOverview();
    this.#wantDetails();
    this.#tables();
  }

  #shownVariants() {
    return [...this.#run.variants.keys()].filter((variant) => this.legend.shows(variant));
  }

  #wantDetails() {
    const { variant, point } = this.selection;
    const variants = [...new Set([variant, ...this.#shownVariants()])];
    this.#details.want(variants.map((one) => [one, point]));
  }

  /** C12(0) at the distance selected, in the shape of a summary; the end of the line has its own. */
  #summaryAt(variant, point) {
    const summary = this.#run.summary(variant, point);
    if (this.selection.atEnd || !summary || summary.outcome !== "completed") return summary;
    const { distance } = this.selection;
    return {
      ...summary,
      value: summary.along.value[distance],
      standard_error: summary.along.standard_error[distance],
      discretization_error: null,
      linear: null,
    };
  }

  #drawDip() {
    const { sweep } = this;
    const { point, atEnd, km } = this.selection;
    const curves = this.#shownVariants().map((variant) => ({
      name: this.#run.variants[variant].name,
      index: variant,
      x: sweep.values,
      points: sweep.values.map((_, i) => this.#summaryAt(variant, i)),
    }));
    const where = atEnd ? "" : ` at ${brief(km)} km`;
    this.#note("dip", `at ${brief(km)} km`);
    this.plots.dip.draw(() => dipFigure({ curves, sweep, mark: sweep.values[point], where }));
  }

  /** Each variant minus the first, with the standard error of the difference itself. */
  #drawDifferences() {
    const { sweep } = this;
    const [first] = this.#run.variants;
    this.differences.hidden = this.#run.variants.length < 2;
    if (!this.differences.open || this.differences.hidden) return;
    const curves = this.#shownVariants().filter((variant) => variant > 0).map((variant) => ({
      name: this.#run.variants[variant].name,
      index: variant,
      x: sweep.values,
      points: sweep.values.map((_, point) => this.#differenceAt(variant, point)),
    }));
    this.#note("difference", `from ${first.name}, at the end of the line`);
    const where = ` − C12(0) of ${first.name}`;
    this.plots.difference.draw(() => dipFigure({ curves, sweep, mark: sweep.values[this.selection.point], where }));
  }

  /** A paired difference in the shape of a summary; null where there is none yet. */
  #differenceAt(variant, point) {
    const own = this.#run.summary(variant, point);
    if (!own?.difference) return null;
    const first = this.#run.summary(0, point);
    return { ...own, ...own.difference, discretization_error: null, linear: own.linear - first.linear };
  }

  #drawMaps() {
    const note = find(this.root, "map-note");
    const { variant, point } = this.selection;
    const live = this.#run.active ? this.#run.liveMap : null;
    const place = (this.selection.following && live) || this.#run.mapNear(variant, point);
    this.root.querySelector(".panel-maps").classList.toggle("no-map", !place);
    if (!place) {
      const awaited = "draws itself once its realization is under way";
      note.textContent = this.#run.active ? awaited : "none is kept for this run";
      return;
    }
    const curve = this.#run.variants[place.variant].name;
    const name = `one realization: ${curve} at ${this.sweep.text(place.point)}`;
    const same = place.variant === variant && place.point === point;
    note.textContent = same || live ? name : `${name}, the nearest that is kept`;
    const map = this.#run.map(place.variant, place.point);
    this.#mapShown = place;
    const distances = this.#run.mapDistances(place.variant, place.point);
    const km = this.selection.atEnd ? null : this.selection.km;
    for (const plot of this.maps) plot.show(map, this.#run.axes.map.time_ps, distances, km);
    const kept = this.#run.summary(place.variant, place.point)?.has_map;
    if (kept && !this.#run.hasFinalMap(place.variant, place.point)) this.#details.wantMap(place.variant, place.point);
  }

  #drawPoint() {
    const { axes } = this.#run;
    const { variant, point } = this.selection;
    const own = this.#run.detail(variant, point);
    const shown = this.#shownVariants().flatMap((index) => {
      const detail = this.#run.detail(index, point);
      return detail ? [{ index, name: this.#run.variants[index].name, detail }] : [];
    });
    const name = this.#run.variants[variant].name;
    const at = this.sweep.text(point);
    for (const key of ["auto", "spectra"]) this.#note(key, `${name} at ${at}`);
    for (const key of ["cross", "distance", "contrast", "durations"]) this.#note(key, `at ${at}`);
    const summary = this.#run.summary(variant, point);
    const flagged = summary && summary.outcome !== "completed";
    const instead = flagged ? `flagged: ${summary.outcome.replaceAll("_", " ")}` : "not computed yet";
    const draw = (key, ready, make) => (ready ? this.plots[key].draw(make) : this.plots[key].clear(instead));
    draw("cross", shown.length, () => figures.crossFigure(axes, shown));
    draw("auto", own, () => figures.autoFigure(axes, own));
    draw("spectra", own, () => figures.spectraFigure(axes, own));
    const lines = this.#shownVariants().flatMap((index) => {
      const one = this.#run.summary(index, point);
      if (one?.outcome !== "completed") return [];
      const distances = this.#run.distances(index, point);
      return [{ index, name: this.#run.variants[index].name, distances, summary: one }];
    });
    draw("distance", lines.length, () => figures.distanceFigure(lines, this.selection.km));
    draw("contrast", shown.length, () => figures.contrastFigure(axes, shown));
    draw("durations", shown.length, () => figures.durationsFigure(axes, shown));
    find(this.root, "readout-note").textContent = `at ${at}`;
    fillReadout(find(this.root, "readout"), this.#shownVariants().map((index) => ({
      name: this.#run.variants[index].name, detail: this.#run.detail(index, point),
    })));
  }

  #drawOverview() {
    if (!this.overview.open) return;
    const { variant } = this.selection;
    const { sweep } = this;
    this.#note("overview", this.#run.variants[variant].name);
    const rows = sweep.values.map((_, i) => this.#run.summary(variant, i)?.along?.value);
    const shares = sweep.values.some((_, i) => this.#run.stretch(variant, i) !== 1);
    const whole = this.#run.lengthKm;
    const places = this.#run.axes.distance_km.map((z) => (shares ? z / whole : z));
    this.plots.overview.draw(() => figures.overviewFigure(places, sweep, rows, { shares }));
  }

  #note(panel, text) {
    find(this.root.querySelector(`[data-panel="${panel}"]`), "note").textContent = text;
  }

  #tablesSoon() {
    this.#tablesTimer ??= setTimeout(() => this.#tables(), TABLES_MS);
  }

  #tables() {
    clearTimeout(this.#tablesTimer);
    this.#tablesTimer = null;
    if (!this.#run) return;
    fillValues(find(this.root, "values"), this.#run, this.sweep);
    fillRemarks(find(this.root, "remarks"), this.#run, this.sweep);
  }

  /** Show the whole window or a stretch in which single domains can be told apart. */
  #frameMaps() {
    const [from, to] = edges(this.#run.axes.map.time_ps);
    const middle = (from + to) / 2;
    const stretch = Math.min(to - from, CLOSE_UP_WIDTHS * 1000 / this.#run.study.experiment.source.width_ghz);
    const whole = find(this.root, "whole-window").checked;
    const span = whole ? [from, to] : [middle - stretch / 2, middle + stretch / 2];
    for (const map of this.maps) {
      map.span = span;
      map.surface.resetAxes();
    }
  }

  #zoomTogether(source, change) {
    const axes = Object.fromEntries(
      Object.entries(change).filter(([key]) => /^[xy]axis\.(range|autorange)/.test(key)),
    );
    if (this.zooming) return;
    this.zooming = true;
    const others = this.maps.filter((map) => map !== source);
    Promise.all(others.map((map) => map.surface.relayout(axes))).finally(() => { this.zooming = false; });
  }

  #save(key) {
    const title = this.#run.row.title.replace(/[^\p{L}\p{N} _.-]/gu, "").trim() || this.#run.id;
    this.plots[key].save(`${title} ${key}`);
  }

  #resetAxes(key) {
    const surfaces = key === "maps" ? this.maps.map((map) => map.surface) : [this.plots[key]];
    for (const surface of surfaces) surface.resetAxes();
  }
}
