// The results of one run: maps, the dip curve, and the plots of the point selected.

import { Details } from "../model/details.js";
import { parameterRows, parameterSentences } from "../model/parameters.js";
import { brief, sweepAxis } from "../model/quantities.js";
import { overviewFigure, surfaceFigure } from "../plots/along.js";
import { dipFigure, limitOf } from "../plots/dip.js";
import { edges, EvolutionPlot } from "../plots/evolution.js";
import { Surface } from "../plots/surface.js";
import { find, findAll, say } from "./elements.js";
import { Legend } from "./legend.js";
import { PointPlots } from "./point-plots.js";
import { fillChecks, fillInvariants, fillScales, fillWidths } from "./point-tables.js";
import { Selection } from "./selection.js";
import { fillReadout, fillRemarks, fillValues } from "./tables.js";
import { powerUnit } from "./shell.js";
import { Topics } from "./topics.js";

const TABLES_MS = 500;
// Length of the maps' close-up, in inverse widths of the source: some hundred domains.
const CLOSE_UP_WIDTHS = 40;

export class Results {
  #run = null;
  #details = null;
  #mapShown = null;
  #tablesTimer = null;

  /** parameters: every parameter, as the page carries them. */
  constructor(root, parameters) {
    Object.assign(this, { root, parameters });
    const box = (key) => root.querySelector(`[data-plot="${key}"]`);
    const readout = find(root, "map-readout");
    this.maps = [0, 1, 2].map((plane) => new EvolutionPlot(box(`map-${plane}`), plane, readout));
    for (const map of this.maps) map.zoomed = (change) => this.#zoomTogether(map, change);
    this.pointPlots = new PointPlots(root);
    this.plots = { dip: new Surface(box("dip"), { intervalMs: 300 }), ...this.pointPlots.plots };
    for (const key of ["overview", "surface", "difference"]) {
      this.plots[key] = new Surface(box(key), { intervalMs: 500 });
    }
    this.legend = new Legend(find(root, "legend"), () => this.#comparisonChanged());
    this.selection = new Selection(root, () => this.#selectionChanged());
    this.topics = new Topics(root, () => this.#topicChanged());
    powerUnit.addEventListener("change", () => this.#run && this.#drawAll());
    this.layer = find(root, "map-layer");
    this.layer.addEventListener("change", () => { this.maps[0].layer = Number(this.layer.value); });
    const whole = find(root, "whole-window");
    whole.addEventListener("change", () => this.#run && this.#frameMaps());
    for (const [act, name] of [["save", "save"], ["csv", "saveData"]]) {
      for (const button of findAll(root, act)) {
        button.addEventListener("click", () => this.#export(name, button.dataset[act]));
      }
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
    this.topics.show(this.selection.topic ?? this.topics.shown);
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
      this.#drawSurfaces();
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
    this.#drawSurfaces();
    this.#drawMaps();
    this.#drawPoint();
    this.#wantDetails();
  }

  #topicChanged() {
    this.selection.topic = this.topics.shown === this.topics.usual ? null : this.topics.shown;
    this.selection.remember();
    this.#wantDetails();
    this.#drawPoint();
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
    this.#drawSurfaces();
    this.#wantDetails();
    this.#tables();
  }

  #shownVariants() {
    return [...this.#run.variants.keys()].filter((variant) => this.legend.shows(variant));
  }

  #wantDetails() {
    const { variant, point } = this.selection;
    const variants = [...new Set([variant, ...this.#shownVariants()])];
    const here = variants.map((one) => [one, point]);
    const all = PointPlots.needsSweep(this.topics.shown)
      ? this.#shownVariants().flatMap((one) => this.sweep.values.map((_, i) => [one, i]))
      : [];
    this.#details.want([...here, ...all]);
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
      limited_by: "",
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
    const { variant: chosen, point } = this.selection;
    const first = this.#run.firstOf(chosen);
    const panel = this.root.querySelector('[data-panel="difference"]');
    panel.hidden = this.#run.variants.length / this.#run.seconds < 2;
    if (panel.hidden) return;
    const curves = this.#shownVariants().filter((variant) => variant !== this.#run.firstOf(variant)).map((variant) => ({
      name: this.#run.variants[variant].name,
      index: variant,
      x: sweep.values,
      points: sweep.values.map((_, i) => this.#differenceAt(variant, i)),
    }));
    const single = this.#run.seconds === 1;
    const name = single ? this.#run.variants[first].name : "the first variant";
    this.#note("difference", `from ${name}, at the end of the line`);
    const where = ` − C12(0) of ${name}`;
    this.plots.difference.draw(() => dipFigure({ curves, sweep, mark: sweep.values[point], where }));
  }

  /** A paired difference in the shape of a summary; null where there is none yet. */
  #differenceAt(variant, point) {
    const own = this.#run.summary(variant, point);
    if (!own?.difference) return null;
    const first = this.#run.summary(this.#run.firstOf(variant), point);
    const linear = first ? own.linear - first.linear : null;
    return { ...own, ...own.difference, discretization_error: null, linear, limited_by: "" };
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
    const { variant, point } = this.selection;
    const at = this.sweep.text(point);
    const summary = this.#run.summary(variant, point);
    const flagged = summary && summary.outcome !== "completed";
    const named = (index) => ({
      index, name: this.#run.variants[index].name, distances: this.#run.distances(index, point),
    });
    const variants = this.#shownVariants();
    const own = this.#run.detail(variant, point);
    this.pointPlots.draw({
      axes: this.#run.axes,
      sweep: this.sweep,
      mark: this.sweep.values[point],
      km: this.selection.km,
      at,
      name: this.#run.variants[variant].name,
      distances: this.#run.distances(variant, point),
      instead: flagged ? `flagged: ${summary.outcome.replaceAll("_", " ")}` : "not computed yet",
      own: own?.correlations ? own : null,
      shown: variants.map((index) => ({ ...named(index), detail: this.#run.detail(index, point) }))
        .filter(({ detail }) => detail?.correlations),
      curves: variants.map((index) => ({
        ...named(index),
        details: this.sweep.values.map((_, i) => this.#run.detail(index, i)),
        summaries: this.sweep.values.map((_, i) => this.#run.summary(index, i)),
      })),
    });
    this.#fillTables(own, at);
    this.#drawVerdict(own, summary, at);
  }

  /** What limits the point selected, in words under its curve. */
  #drawVerdict(own, summary, at) {
    const words = own?.budget?.verdict;
    const limit = summary && summary.outcome === "completed" ? limitOf(summary) : "";
    const text = words ?? (limit && `Limited by ${limit}.`);
    const name = this.#run.variants[this.selection.variant].name;
    say(find(this.root, "verdict"), text ? `${name} at ${at}: ${text}` : "");
  }

  #fillTables(own, at) {
    const name = this.#run.variants[this.selection.variant].name;
    const none = own ? "This run does not hold it." : "Not computed yet.";
    for (const [key, fill, found] of [
      ["widths", fillWidths, own?.widths],
      ["checks", fillChecks, own?.budget?.checks],
      ["invariants", fillInvariants, own?.invariants],
      ["scales", fillScales, own?.scales],
    ]) {
      this.#note(key, `${name} at ${at}`);
      fill(this.root.querySelector(`table[data-${key}]`), found, none);
    }
    this.#note("readout", `at ${at}`);
    fillReadout(this.root.querySelector("table[data-readout]"), this.#shownVariants().map((index) => ({
      name: this.#run.variants[index].name, detail: this.#run.detail(index, this.selection.point),
    })));
  }

  /** C12(0) over the sweep and the distance, and over both sweeps where there are two. */
  #drawSurfaces() {
    const { variant } = this.selection;
    const { sweep } = this;
    this.#note("overview", this.#run.variants[variant].name);
    const rows = sweep.values.map((_, i) => this.#run.summary(variant, i)?.along?.value);
    const shares = sweep.values.some((_, i) => this.#run.stretch(variant, i) !== 1);
    const whole = this.#run.lengthKm;
    const places = this.#run.axes.distance_km.map((z) => (shares ? z / whole : z));
    this.plots.overview.draw(() => overviewFigure(places, sweep, rows, { shares }));
    const { second } = this.#run.axes;
    this.root.querySelector('[data-panel="surface"]').hidden = !second;
    if (!second) return;
    const curves = this.#run.siblingsOf(variant);
    const over = sweep.values.map((_, i) => curves.map((curve) => this.#summaryAt(curve, i)?.value ?? null));
    this.#note("surface", `at ${brief(this.selection.km)} km`);
    this.plots.surface.draw(() => surfaceFigure(sweep, sweepAxis(second, powerUnit.value), over));
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

  /** Save a plot's data or drawing, with the parameters that it was made with. */
  #export(act, key) {
    const title = this.#run.row.title.replace(/[^\p{L}\p{N} _.-]/gu, "").trim() || this.#run.id;
    const { variant, point } = key === "map" ? this.#mapShown ?? this.selection : this.selection;
    const experiment = this.#run.experimentAt(variant, point);
    const name = this.#run.variants[variant].name;
    const curves = this.#run.variants.map((one) => one.name).join("; ");
    const about = [
      `${this.#run.row.title} (run ${this.#run.id}), ${name} at ${this.sweep.text(point)}`,
      `curves: ${curves}; sweep: ${this.sweep.title} ${this.sweep.text(0)} to ${this.sweep.text(this.sweep.values.length - 1)}`,
    ];
    const words = act === "save" ? parameterSentences : parameterRows;
    const plot = key === "map" ? this.maps[0] : this.plots[key];
    const target = key === "map" && act === "save" ? plot.surface : plot;
    target[act](`${title} ${key}`, [...about, ...words(experiment, this.parameters)]);
  }

  #resetAxes(key) {
    const surfaces = key === "maps" ? this.maps.map((map) => map.surface) : [this.plots[key]];
    for (const surface of surfaces) surface.resetAxes();
  }
}
