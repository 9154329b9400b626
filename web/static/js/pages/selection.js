// Which point is looked at: variant, sweep point and distance; kept in the address after the #.

import { brief } from "../model/quantities.js";
import { find, make } from "./elements.js";

export class Selection {
  variant = 0;
  point = 0;
  distance = 0;
  hidden = new Set();
  topic = null;
  #run = null;

  /** changed() is called when somebody moves to another point. */
  constructor(root, changed) {
    this.root = root;
    this.changed = changed;
    this.part = (name) => find(root, name);
    const moved = () => {
      this.part("follow").checked = false;
      this.variant = Number(this.part("pick-variant").value);
      this.point = Number(this.part("pick-point").value);
      this.distance = Number(this.part("pick-distance").value);
      this.#show();
      this.remember();
      this.changed();
    };
    this.part("pick-variant").addEventListener("change", moved);
    this.part("pick-point").addEventListener("input", moved);
    this.part("pick-distance").addEventListener("input", moved);
  }

  /** Start on a run: where the address says, else at its live map, else at the far end. */
  open(run, sweep) {
    this.#run = run;
    const asked = new URLSearchParams(location.hash.slice(1));
    const last = { point: sweep.values.length - 1, distance: run.axes.distance_km.length - 1 };
    const within = (name, most, otherwise) => {
      const value = Number(asked.get(name) ?? NaN);
      return Number.isInteger(value) && value >= 0 && value <= most ? value : otherwise;
    };
    const start = run.liveMap ?? run.mapNear(0, last.point) ?? { variant: 0, point: last.point };
    this.variant = within("variant", run.variants.length - 1, start.variant);
    this.point = within("point", last.point, start.point);
    this.distance = within("distance", last.distance, last.distance);
    this.hidden = new Set((asked.get("hidden") ?? "").split(",").filter(Boolean).map(Number));
    this.topic = asked.get("topic");
    this.part("follow").checked = !asked.has("point");
    this.part("pick-variant").replaceChildren(
      ...run.variants.map(({ name }, index) => make("option", { value: index }, name)),
    );
    this.part("pick-point").max = last.point;
    this.part("pick-distance").max = last.distance;
    this.relabel(sweep);
  }

  get following() {
    return this.#run.active && this.part("follow").checked;
  }

  get atEnd() {
    return this.distance === this.#run.axes.distance_km.length - 1;
  }

  /** The distance selected, in km of the line of the point selected. */
  get km() {
    return this.#run.distances(this.variant, this.point)[this.distance];
  }

  /** Follow the run to another point. */
  move({ variant, point }) {
    if (variant === this.variant && point === this.point) return;
    Object.assign(this, { variant, point });
    this.#show();
    this.changed();
  }

  /** The sweep's unit has changed. */
  relabel(sweep) {
    this.sweep = sweep;
    this.part("pick-title").textContent = this.#run.axes.sweep.title;
    this.refresh();
  }

  refresh() {
    this.part("follow-row").hidden = !this.#run.active;
    this.#show();
  }

  /** Put the selection into the address, so that a copied link opens to the same view. */
  remember() {
    const asked = new URLSearchParams({ variant: this.variant, point: this.point });
    if (!this.atEnd) asked.set("distance", this.distance);
    if (this.topic) asked.set("topic", this.topic);
    if (this.hidden.size) asked.set("hidden", [...this.hidden].join(","));
    history.replaceState(history.state, "", `#${asked}`);
  }

  #show() {
    const km = `${brief(this.km)} km`;
    this.part("pick-variant").value = this.variant;
    this.#slide("pick-point", this.point, this.sweep.text(this.point));
    this.#slide("pick-distance", this.distance, km);
  }

  #slide(name, value, text) {
    this.part(name).value = value;
    this.part(name).setAttribute("aria-valuetext", text);
    this.part(`${name}-value`).textContent = text;
  }
}
