// "Choose the grid for me": the server suggests window and samples, and says why.

import { api } from "../model/links.js";
import { brief } from "../model/quantities.js";
import { post } from "../model/requests.js";
import { find, make, say } from "./elements.js";

export class GridChoice {
  constructor(root, form) {
    this.form = form;
    this.button = find(root, "plan");
    this.reasons = find(root, "plan-reasons");
    this.fault = find(root, "plan-fault");
    this.button.addEventListener("click", () => this.#choose());
  }

  async #choose() {
    say(this.fault, "");
    this.reasons.hidden = true;
    this.button.disabled = true;
    try {
      const { window_ps, samples, reasons } = await post(api.plan, this.form.study);
      Object.assign(this.form.study.experiment.ensemble, { window_ps, samples });
      this.form.valuesSet();
      const chosen = `${brief(window_ps, 6)} ps in ${samples} samples of ${brief(window_ps / samples, 3)} ps.`;
      this.reasons.replaceChildren(...[chosen, ...reasons.map(sentence)].map((text) => make("li", {}, text)));
      this.reasons.hidden = false;
    } catch (refusal) {
      if (refusal.where) this.form.refuse(refusal);
      say(this.fault, refusal.message);
    } finally {
      this.button.disabled = false;
    }
  }
}

const sentence = ({ title, value, unit, decides }) =>
  `${title}: ${brief(value, 3)} ${unit}${decides ? ", which decides" : ""}.`;
