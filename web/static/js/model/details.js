// Fetches the details of the points in view, not more often than the page can show them.

import { api } from "./links.js";
import { get, getMap } from "./requests.js";
import { keyOf } from "./run.js";

// While a run goes on, the server and the workers need the cores more than these plots do.
const ROUND_MS = 300;
const ACTIVE_ROUND_MS = 1200;
const LONGEST_ROUND_MS = 5000;
// One less than a browser's share for the stream and one for everything else.
const AT_ONCE = 4;

export class Details {
  #wanted = [];
  #mapWanted = null;
  #timer = null;
  #busy = false;
  #waitMs = ROUND_MS;
  #stopped = false;

  /** arrived(kind, variant, point) is called for each "detail" or "map" that came. */
  constructor(run, arrived) {
    this.run = run;
    this.arrived = arrived;
    this.fetched = new Map();
  }

  /** Keep these points' details fresh: a list of [variant, point]. */
  want(points) {
    this.#wanted = points;
    this.#schedule(this.run.active && this.fetched.size ? ACTIVE_ROUND_MS : 0);
  }

  /** Fetch the whole map of a point unless it is here already. */
  wantMap(variant, point) {
    this.#mapWanted = [variant, point];
    this.hurry();
  }

  /** Fetch what is missing without waiting: the run has ended, or somebody asked for it. */
  hurry() {
    clearTimeout(this.#timer);
    this.#timer = null;
    this.#schedule(0);
  }

  /** Points have changed: fetch again those in view. */
  stale() {
    this.#schedule(ACTIVE_ROUND_MS);
  }

  stop() {
    this.#stopped = true;
    clearTimeout(this.#timer);
  }

  #schedule(waitMs) {
    if (this.#stopped || this.#busy || this.#timer !== null) return;
    this.#timer = setTimeout(() => this.#round(), waitMs);
  }

  #missing() {
    return this.#wanted.filter(([variant, point]) => {
      const summary = this.run.summary(variant, point);
      if (!summary || summary.outcome !== "completed") return false;
      const known = this.fetched.has(keyOf(variant, point));
      if (known && this.run.active && !summary.final) return false;
      return this.fetched.get(keyOf(variant, point)) !== this.run.revision(variant, point);
    });
  }

  async #round() {
    this.#timer = null;
    this.#busy = true;
    const batch = this.#missing().slice(0, AT_ONCE);
    const outcomes = await Promise.all([
      this.#fetchMap(), ...batch.map(([variant, point]) => this.#fetchDetail(variant, point)),
    ]);
    const failed = outcomes.includes(false);
    this.#busy = false;
    const pause = this.run.active ? ACTIVE_ROUND_MS : 0;
    this.#waitMs = failed ? Math.min(LONGEST_ROUND_MS, 2 * Math.max(this.#waitMs, ROUND_MS)) : pause;
    if (this.#missing().length || this.#mapWanted) this.#schedule(this.#waitMs);
  }

  async #fetchDetail(variant, point) {
    const revision = this.run.revision(variant, point);
    try {
      this.run.details.set(keyOf(variant, point), await get(api.detail(this.run.id, variant, point)));
    } catch {
      return false;
    }
    this.fetched.set(keyOf(variant, point), revision);
    if (!this.#stopped) this.arrived("detail", variant, point);
    return true;
  }

  async #fetchMap() {
    if (!this.#mapWanted) return;
    const [variant, point] = this.#mapWanted;
    this.#mapWanted = null;
    if (this.run.hasFinalMap(variant, point)) return;
    try {
      this.run.keepMap(variant, point, await getMap(api.map(this.run.id, variant, point)));
      if (!this.#stopped) this.arrived("map", variant, point);
    } catch {
      // No map is kept for this point, or not yet: the stream or a later summary brings it.
    }
  }
}
