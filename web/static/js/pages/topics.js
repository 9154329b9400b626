// The topics of a point, of which one is shown at a time: tabs, for pointer and keyboard.

import { findAll } from "./elements.js";

const STEPS = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 };

export class Topics {
  /** changed() is called when another topic is shown. */
  constructor(root, changed) {
    this.tabs = findAll(root, "topic");
    this.panels = findAll(root, "about");
    this.changed = changed;
    for (const tab of this.tabs) {
      tab.addEventListener("click", () => this.#choose(tab));
      tab.addEventListener("keydown", (event) => this.#step(event, tab));
    }
  }

  /** The topic shown. */
  get shown() {
    return this.tabs.find((tab) => tab.getAttribute("aria-selected") === "true").dataset.topic;
  }

  /** The first topic, which an address need not name. */
  get usual() {
    return this.tabs[0].dataset.topic;
  }

  /** Show a topic by its key; an unknown one leaves things as they are. */
  show(key) {
    if (!this.tabs.some((tab) => tab.dataset.topic === key)) return;
    for (const tab of this.tabs) {
      const chosen = tab.dataset.topic === key;
      tab.setAttribute("aria-selected", String(chosen));
      tab.tabIndex = chosen ? 0 : -1;
    }
    for (const panel of this.panels) panel.hidden = panel.dataset.about !== key;
  }

  #choose(tab) {
    this.show(tab.dataset.topic);
    this.changed();
  }

  #step(event, tab) {
    const step = STEPS[event.key];
    if (!step) return;
    event.preventDefault();
    const { length } = this.tabs;
    const next = this.tabs[(this.tabs.indexOf(tab) + step + length) % length];
    next.focus();
    this.#choose(next);
  }
}
