// The study form: keeps a study in step with its entries and puts each fault at its entry.

import { dbmFromMw, mwFromDbm, POWER_PATH, brief, plain } from "../model/quantities.js";
import { applies, equivalentDispersion, interpret, read, summaries, write } from "../model/study.js";
import { find, findAll, make, say, settled } from "./elements.js";
import { GridChoice } from "./grid-choice.js";
import { Spans } from "./spans.js";
import { Spectrum } from "./spectrum.js";
import { Switches } from "./switches.js";
import { Variants } from "./variants.js";
import { powerUnit } from "./shell.js";

const SWEEP_END = /^(sweep|second)\.(start|stop)$/;

export class StudyForm {
  #data;
  #faults = new Map();

  /** root: the form element; data: defaults, span, parameters, as the page carries them. */
  constructor(root, data) {
    this.root = root;
    this.#data = data;
    this.changed = () => {};
    this.study = structuredClone(data.defaults);
    this.#fillSweepChoice();
    this.spans = new Spans(find(root, "spans"), this, data);
    this.variants = new Variants(find(root, "variants"), this);
    this.spectrum = new Spectrum(find(root, "spectrum"), this);
    this.switches = new Switches(root, this, data);
    this.gridChoice = new GridChoice(root, this);
    root.addEventListener("input", (event) => this.#typed(event.target));
    root.addEventListener("change", (event) => this.#typed(event.target));
    find(root, "add-span").addEventListener("click", () => this.spans.add());
    find(root, "add-variant").addEventListener("click", () => this.variants.add());
    powerUnit.attach(find(root, "power-unit"));
    powerUnit.addEventListener("change", () => this.#show());
    this.touched = settled(() => this.changed(), 50);
    this.load(this.study);
  }

  /** Show another study. */
  load(study) {
    this.study = structuredClone(study);
    this.#faults.clear();
    this.clearRefusals();
    this.spans.render();
    this.variants.render();
    this.#show();
  }

  get valid() {
    return this.#faults.size === 0;
  }

  /** Put a refusal of the server at the entry it names, or above the form. */
  refuse({ where, message }) {
    const target = this.#placeOf(where);
    if (!target) {
      say(find(this.root, "fault-general"), message);
      return;
    }
    say(target, message);
    this.#reveal(target);
  }

  clearRefusals() {
    for (const place of this.root.querySelectorAll(".fault")) {
      if (!this.#faults.has(place.dataset.faultFor)) say(place, "");
    }
    for (const entry of this.root.querySelectorAll("[aria-invalid]")) {
      if (!this.#faults.has(entry.dataset.path)) entry.removeAttribute("aria-invalid");
    }
  }

  /** Lead to the first entry at fault. */
  revealFirstFault() {
    const [path] = this.#faults.keys();
    const place = this.#placeOf(path);
    if (place) this.#reveal(place);
  }

  /** The structure changed (spans, variants): show everything again. */
  restructured() {
    for (const path of this.#faults.keys()) {
      if (path.startsWith("experiment.line.") || path.startsWith("variants.")) this.#faults.delete(path);
    }
    this.#show();
    this.touched();
  }

  /** Values of the study were set from elsewhere: show them. */
  valuesSet() {
    this.#faults.clear();
    this.clearRefusals();
    this.#show();
    this.touched();
  }

  /** A variant's own entry changed. */
  variantEdited() {
    this.clearRefusals();
    this.#showConditions();
    this.#showSummaries();
    this.touched();
  }

  label = (value) => {
    const option = this.root.querySelector(`option[value="${CSS.escape(value)}"]`);
    return option ? option.textContent.trim() : value;
  };

  #fillSweepChoice() {
    for (const axis of ["sweep", "second"]) {
      const select = this.root.querySelector(`[data-path="${axis}.parameter"]`);
      for (const { path, title, unit } of this.#data.parameters.filter(({ swept }) => swept)) {
        const stage = path.split(".")[0];
        select.append(make("option", { value: path }, `${stage}: ${title}${unit ? ` (${unit})` : ""}`));
      }
    }
  }

  #entries() {
    return findAll(this.root, "path");
  }

  #inDbm(entry) {
    if (powerUnit.value !== "dBm") return false;
    if ("power" in entry.dataset) return true;
    return this.#sweepOfEnd(entry)?.parameter === POWER_PATH;
  }

  /** The sweep of which an entry is an end; null for every other entry. */
  #sweepOfEnd(entry) {
    const [, axis] = SWEEP_END.exec(entry.dataset.path) ?? [];
    return axis ? this.study[axis] : null;
  }

  /** What an entry stands for just now: its bounds and unit, in the unit typed. */
  #spec(entry) {
    const { path, kind, title, unitIs } = entry.dataset;
    let low = "low" in entry.dataset ? Number(entry.dataset.low) : null;
    let high = "high" in entry.dataset ? Number(entry.dataset.high) : null;
    let unit = unitIs;
    const sweep = this.#sweepOfEnd(entry);
    if (sweep) {
      const swept = this.#data.parameters.find((one) => one.path === sweep.parameter);
      if (swept) ({ low, high, unit } = swept);
    }
    if (this.#inDbm(entry)) {
      unit = "dBm";
      low = low > 0 ? dbmFromMw(low) : null;
      high = high === null ? null : dbmFromMw(high);
    }
    return { kind, title, unit, low, high, optional: "optional" in entry.dataset };
  }

  #typed(entry) {
    const { path } = entry.dataset ?? {};
    if (!path) return;
    this.clearRefusals();
    const { value, fault } = interpret(entry.value, this.#spec(entry));
    this.#mark(entry, fault);
    if (!fault) {
      const inMw = this.#inDbm(entry) && value !== null ? Number(mwFromDbm(value).toPrecision(12)) : value;
      write(this.study, path, inMw);
      if (value !== null && entry.dataset.alternative) this.#empty(path, entry.dataset.alternative);
    }
    if (/^(sweep|second)\.parameter$/.test(path)) this.#sweepChanged(path.split(".")[0]);
    this.#showConditions();
    this.#showSummaries();
    this.touched();
  }

  /** Filling one of two alternatives empties the other. */
  #empty(path, alternative) {
    const other = `${path.slice(0, path.lastIndexOf(".") + 1)}${alternative}`;
    write(this.study, other, null);
    const entry = this.root.querySelector(`[data-path="${other}"]`);
    entry.value = "";
    this.#mark(entry, null);
  }

  /** Another swept parameter has other units: take its present value's neighbourhood. */
  #sweepChanged(axis) {
    const { [axis]: sweep, experiment } = this.study;
    const present = read(experiment, sweep.parameter.replace("line.*", "line.0"));
    const swept = this.#data.parameters.find((one) => one.path === sweep.parameter);
    const defaults = this.#data.defaults.sweep;
    const { points } = sweep;
    if (sweep.parameter === defaults.parameter) Object.assign(sweep, defaults, { points });
    else if (present) {
      const clip = (x) => Math.min(swept.high ?? x, Math.max(swept.low ?? x, x));
      const [start, stop] = [clip(present / 2), clip(present * 2)];
      Object.assign(sweep, { start, stop, spacing: "linear" });
    } else {
      const stop = Math.min(swept.high ?? 1, 1);
      Object.assign(sweep, { start: swept.low ?? 0, stop, spacing: "linear" });
    }
    this.#show();
  }

  #mark(entry, fault) {
    const { path } = entry.dataset;
    if (fault) this.#faults.set(path, fault);
    else this.#faults.delete(path);
    entry.toggleAttribute("aria-invalid", Boolean(fault));
    if (fault) entry.setAttribute("aria-invalid", "true");
    const place = this.root.querySelector(`[data-fault-for="${path}"]`);
    if (place) say(place, fault);
  }

  #show() {
    for (const entry of this.#entries()) {
      const value = read(this.study, entry.dataset.path);
      const shown = this.#inDbm(entry) && value > 0 ? Number(dbmFromMw(value).toFixed(4)) : value;
      if (document.activeElement !== entry || !this.#faults.has(entry.dataset.path)) {
        entry.value = typeof shown === "number" ? plain(shown) : (shown ?? "");
        this.#mark(entry, null);
      }
      this.#showUnit(entry);
    }
    this.#showConditions();
    this.#showSummaries();
  }

  #showUnit(entry) {
    const field = entry.closest(".field");
    const unit = find(field, "unit");
    if (!unit || !("power" in entry.dataset || SWEEP_END.test(entry.dataset.path))) return;
    const spec = this.#spec(entry);
    unit.textContent = spec.unit;
    const ends = [spec.low, spec.high].map((x) => (x === null ? "" : brief(x)));
    find(field, "bounds").textContent = ends[0] || ends[1] ? `${ends[0]} to ${ends[1]} ${spec.unit}` : "";
  }

  /** Parameters that do not apply are hidden and hold their default. */
  #showConditions() {
    const swept = [this.study.sweep.parameter, this.study.second?.parameter];
    for (const field of findAll(this.root, "field")) {
      const path = field.dataset.field;
      if (field.dataset.when) {
        const shown = applies(this.study, path, JSON.parse(field.dataset.when));
        if (!shown && !field.hidden) this.#toDefault(path);
        field.hidden = !shown;
      }
      const inside = path.replace(/^experiment\./, "").replace(/^line\.\d+\./, "line.*.");
      field.classList.toggle("swept", swept.includes(inside));
    }
    for (const entry of this.#entries()) this.#showAlternative(entry);
    this.switches.show();
    this.spectrum.show();
    this.spans.showKinds();
  }

  #toDefault(path) {
    const inDefaults = path.replace(/^experiment\.line\.\d+/, "experiment.line.0");
    const value = read(this.#data.defaults, inDefaults) ?? null;
    write(this.study, path, value);
    const entry = this.root.querySelector(`[data-path="${path}"]`);
    if (!entry) return;
    entry.value = value === null ? "" : plain(value);
    this.#mark(entry, null);
  }

  #showAlternative(entry) {
    const { path, alternative } = entry.dataset;
    if (!alternative) return;
    const parent = path.slice(0, path.lastIndexOf("."));
    const other = read(this.study, `${parent}.${alternative}`);
    const own = read(this.study, path);
    if (own === null && other === null) {
      entry.placeholder = "give one of the two";
      return;
    }
    if (own !== null) return;
    const wavelength = this.study.experiment.source.wavelength_nm;
    entry.placeholder = `= ${brief(equivalentDispersion(other, alternative, wavelength))}`;
  }

  #showSummaries() {
    const lines = summaries(this.study, {
      powerUnit: powerUnit.value, label: this.label, parameters: this.#data.parameters,
    });
    for (const [key, text] of Object.entries(lines)) {
      const line = this.root.querySelector(`[data-summary="${key}"]`);
      line.textContent = text;
      line.title = text;
      const stage = line.closest(".stage");
      stage.classList.toggle("at-fault", Boolean(stage.querySelector('[aria-invalid="true"]')));
    }
  }

  /** The place for a message about a path: its own, or the nearest one that holds it. */
  #placeOf(where) {
    for (let path = where; path; path = path.slice(0, Math.max(0, path.lastIndexOf(".")))) {
      const place = this.root.querySelector(`[data-fault-for="${CSS.escape(path)}"]`);
      if (place && !place.closest("[data-field][hidden]")) return place;
    }
    return null;
  }

  #reveal(place) {
    for (let box = place.closest("details"); box; box = box.parentElement.closest("details")) box.open = true;
    const entry =
      this.root.querySelector(`[data-path="${place.dataset.faultFor}"]`) ??
      place.parentElement.querySelector("input:not([hidden]), select, button");
    if (entry.dataset.path) entry.setAttribute("aria-invalid", "true");
    entry.focus();
    place.scrollIntoView({ block: "nearest" });
  }
}
