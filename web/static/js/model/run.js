// One run as the page knows it: what /view said, kept up to date by the event stream.

import { Evolution, bytesOf } from "./evolution.js";
import { withChanges } from "./study.js";

export const TERMINAL = new Set(["done", "failed", "cancelled"]);

export const keyOf = (variant, point) => `${variant}-${point}`;

export class Run {
  constructor(view) {
    this.maps = new Map();
    this.finalMaps = new Set();
    this.details = new Map();
    this.revisions = new Map();
    this.renew(view);
  }

  /** Start again from a fresh /view; maps and details already fetched stay. */
  renew(view) {
    const { study, sequence, axes, variants, points, live_map: liveMap, ...row } = view;
    Object.assign(this, { row, study, sequence, axes, variants, points, liveMap });
    this.lengthKm = axes.distance_km.at(-1);
    this.stretched = new Map();
    this.viewed = sequence;
  }

  get id() {
    return this.row.id;
  }

  get active() {
    return !TERMINAL.has(this.row.state);
  }

  summary(variant, point) {
    return this.points[variant]?.[point] ?? null;
  }

  detail(variant, point) {
    return this.details.get(keyOf(variant, point)) ?? null;
  }

  /** Length of a point's line over that of the experiment as given; not 1 when length is varied. */
  stretch(variant, point) {
    const live = this.liveMap?.variant === variant && this.liveMap.point === point;
    const known = this.summary(variant, point)?.length_km ?? (live ? this.liveMap.lengthKm : null);
    return (known ?? this.lengthKm) / this.lengthKm;
  }

  /** How many values the second sweep has; each variant is a curve for each of them. */
  get seconds() {
    return this.axes.second?.values.length ?? 1;
  }

  /** The curve that a curve is compared with: the first variant at the same second value. */
  firstOf(variant) {
    return variant % this.seconds;
  }

  /** The curves of the variant that a curve belongs to, one for each value of the second sweep. */
  siblingsOf(variant) {
    const first = variant - (variant % this.seconds);
    return Array.from({ length: this.seconds }, (_, i) => first + i);
  }

  /** The whole experiment of one point of one curve. */
  experimentAt(variant, point) {
    const { sweep } = this.axes;
    const { changes } = this.variants[variant];
    return withChanges(this.study.experiment, { ...changes, [sweep.parameter]: sweep.values[point] });
  }

  /** Distances at which C12(0) of a point is known, km. */
  distances(variant, point) {
    const stretch = this.stretch(variant, point);
    return this.axes.distance_km.map((z) => z * stretch);
  }

  /** Distance axis of a point's map, km; the same array for the same length. */
  mapDistances(variant, point) {
    const stretch = this.stretch(variant, point);
    if (!this.stretched.has(stretch)) {
      this.stretched.set(stretch, this.axes.map.distance_km.map((z) => z * stretch));
    }
    return this.stretched.get(stretch);
  }

  /** Whether an event is later than /view; the map's earlier rows are played again besides. */
  isNews(id) {
    const [epoch, number] = this.viewed.split("-");
    const [itsEpoch, itsNumber] = id.split("-");
    return epoch !== itsEpoch || Number(itsNumber) > Number(number);
  }

  /** Where to follow the stream from: its start when a growing map has to be made up for. */
  get followFrom() {
    const growing = this.active && this.liveMap;
    const known = growing && this.maps.has(keyOf(growing.variant, growing.point));
    return growing && !known ? "" : this.sequence;
  }

  /** Take in one event; returns the point summaries that it changed. */
  apply(type, data) {
    if (type === "state") {
      Object.assign(this.row, { state: data.state, message: data.message });
    } else if (type === "progress") {
      this.row.progress = data;
    } else if (type === "point") {
      for (const summary of data.points) {
        this.points[summary.variant][summary.point] = summary;
        const key = keyOf(summary.variant, summary.point);
        this.revisions.set(key, this.revision(summary.variant, summary.point) + 1);
      }
      return data.points;
    } else if (type === "map") {
      const { variant, point, length_km: lengthKm } = data;
      this.liveMap = { variant, point, lengthKm };
      // The preview must not write over the map whose steps have been checked.
      if (!this.hasFinalMap(data.variant, data.point)) {
        this.map(data.variant, data.point, data.columns).absorb(
          bytesOf(data.data), data.first_row, data.rows, data.intensity_scale_w,
        );
      }
    }
    return [];
  }

  /** How often a point has changed since the page opened; tells whether a detail is stale. */
  revision(variant, point) {
    return this.revisions.get(keyOf(variant, point)) ?? 0;
  }

  map(variant, point, columns = this.axes.map.time_ps.length) {
    const key = keyOf(variant, point);
    if (!this.maps.has(key)) {
      this.maps.set(key, new Evolution(this.axes.map.distance_km.length, columns));
    }
    return this.maps.get(key);
  }

  /** Whether the whole checked map of a point is here. */
  hasFinalMap(variant, point) {
    return this.finalMaps.has(keyOf(variant, point));
  }

  /** Take in a whole map that was fetched. */
  keepMap(variant, point, { data, rows, columns, scale }) {
    this.finalMaps.add(keyOf(variant, point));
    this.map(variant, point, columns).absorb(data, 0, rows, scale);
  }

  /** Whether there is a map for a point, here or on the server. */
  hasMap(variant, point) {
    const summary = this.summary(variant, point);
    return Boolean(summary?.has_map) || this.maps.has(keyOf(variant, point));
  }

  /** The point nearest to the one asked for that has a map, the same variant first; or null. */
  mapNear(variant, point) {
    const order = [variant, ...this.variants.keys()];
    for (const candidate of order) {
      const found = this.points[candidate]
        .map((_, index) => index)
        .filter((index) => this.hasMap(candidate, index))
        .sort((a, b) => Math.abs(a - point) - Math.abs(b - point));
      if (found.length) return { variant: candidate, point: found[0] };
    }
    return null;
  }

  /** Points that ended in anything but a value, and points that the cap stopped. */
  remarks() {
    const flagged = [];
    const capped = [];
    for (const summary of this.points.flat()) {
      if (!summary) continue;
      if (summary.outcome !== "completed") flagged.push(summary);
      else if (summary.final && !summary.target_met) capped.push(summary);
    }
    return { flagged, capped };
  }
}
