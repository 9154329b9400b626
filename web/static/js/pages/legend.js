// The legend: a button for each curve that shows or hides it in every plot.

import { variantColour, variantMarker } from "../model/colour.js";
import { theme } from "../plots/theme.js";
import { make, markerIcon } from "./elements.js";

export class Legend {
  /** changed() is called when the set of hidden curves has changed. */
  constructor(box, changed) {
    Object.assign(this, { box, changed });
    this.hidden = new Set();
    this.names = [];
    theme.addEventListener("change", () => this.#draw());
  }

  show(names, hidden = new Set()) {
    this.names = names;
    this.hidden = hidden;
    this.#draw();
  }

  /** Whether a curve is shown. */
  shows(index) {
    return !this.hidden.has(index);
  }

  #draw() {
    this.box.replaceChildren(...this.names.map((name, index) => this.#entry(name, index)));
  }

  #entry(name, index) {
    const icon = markerIcon(variantMarker(index), variantColour(theme.name, index));
    const toggle = (event) => {
      if (this.hidden.has(index)) this.hidden.delete(index);
      else this.hidden.add(index);
      event.currentTarget.setAttribute("aria-pressed", String(this.shows(index)));
      this.changed();
    };
    return make(
      "button",
      { type: "button", class: "curve", "aria-pressed": String(this.shows(index)), onclick: toggle },
      icon, ` ${name}`,
    );
  }
}
