// Effects switched off and on again: single ones, whole stages, and the second sweep.

import { plain } from "../model/quantities.js";
import { read, sameStudy } from "../model/study.js";
import { find, findAll } from "./elements.js";

export class Switches {
  #kept = new Map();

  /** root: the form element; form: the StudyForm; data: as the page carries it. */
  constructor(root, form, data) {
    Object.assign(this, { root, form, data });
    this.second = find(root, "second-switch");
    this.second.addEventListener("click", () => this.#turnSecond());
    root.addEventListener("click", ({ target }) => {
      if (target.dataset.switch) this.#turn(target.dataset.switch);
      else if (target.dataset.stageSwitch) this.#turnStage(target.dataset.stageSwitch);
    });
  }

  /** The spans have been put in another order: what was switched off in them is forgotten. */
  forgetLine() {
    for (const path of this.#kept.keys()) if (path.startsWith("experiment.line.")) this.#kept.delete(path);
  }

  show() {
    for (const button of findAll(this.root, "switch")) {
      const path = button.dataset.switch;
      const on = this.#isOn(path);
      button.hidden = !on && !this.#kept.has(path);
      button.setAttribute("aria-pressed", String(on));
      button.textContent = on ? "on" : "off";
    }
    for (const button of findAll(this.root, "stage-switch")) {
      const { stageSwitch: stage } = button.dataset;
      const on = !sameStudy(this.#stage(stage), this.data.defaults.experiment[stage]);
      button.hidden = !on && !this.#kept.has(stage);
      button.textContent = on ? "Switch it off" : "Switch it on again";
    }
    const doubled = Boolean(this.form.study.second);
    this.second.textContent = doubled ? "Remove the second sweep" : "Add a second sweep";
    find(this.root, "second-fields").hidden = !doubled;
  }

  #stage(stage) {
    return this.form.study.experiment[stage];
  }

  #off(path) {
    const inside = path.replace(/^experiment\./, "").replace(/^line\.\d+\./, "line.*.");
    return this.data.parameters.find((one) => one.path === inside).default;
  }

  #isOn(path) {
    return (read(this.form.study, path) ?? null) !== this.#off(path);
  }

  #turn(path) {
    const off = this.#off(path);
    const on = this.#isOn(path);
    const next = on ? off : this.#kept.get(path);
    if (on) this.#kept.set(path, read(this.form.study, path));
    const entry = this.root.querySelector(`[data-path="${path}"]`);
    entry.value = next === null ? "" : plain(next);
    entry.dispatchEvent(new Event("input", { bubbles: true }));
  }

  #turnStage(stage) {
    const { experiment } = this.form.study;
    const off = this.data.defaults.experiment[stage];
    const on = !sameStudy(experiment[stage], off);
    const next = on ? off : this.#kept.get(stage);
    if (on) this.#kept.set(stage, experiment[stage]);
    experiment[stage] = structuredClone(next);
    this.form.valuesSet();
  }

  #turnSecond() {
    const { study } = this.form;
    if (study.second) {
      this.#kept.set("second", study.second);
      study.second = null;
    } else study.second = structuredClone(this.#kept.get("second") ?? this.data.second);
    this.form.valuesSet();
  }
}
