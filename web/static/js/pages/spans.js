// The spans of the line: added, removed and put in order.

import { kindOf, spanOfKind } from "../model/fibres.js";
import { api } from "../model/links.js";
import { get } from "../model/requests.js";
import { lineEffects } from "../model/parameters.js";
import { find, findAll, make } from "./elements.js";

const MOST_SPANS = 64;

export class Spans {
  #kinds = null;
  #asked = null;

  /** model: a span as the defaults have it; parameters: every parameter, as the page carries them. */
  constructor(box, form, { span: model, parameters }) {
    Object.assign(this, { box, form, model, parameters });
    this.template = document.getElementById("span-template");
    box.addEventListener("click", (event) => this.#act(event.target));
    box.addEventListener("change", ({ target }) => {
      if ("fibreKind" in target.dataset && target.value) this.#takeKind(target);
    });
    this.stage = box.closest("details");
    this.stage.addEventListener("toggle", () => this.#loadKinds());
  }

  get #line() {
    return this.form.study.experiment.line;
  }

  render() {
    const line = this.#line;
    this.box.replaceChildren(...line.map((_, index) => this.#draw(index, line.length)));
  }

  add() {
    if (this.#line.length >= MOST_SPANS) return;
    this.#line.push(structuredClone(this.#line.at(-1) ?? this.model));
    this.#rebuilt(this.#line.length - 1, "input");
  }

  /** Say which kind of the catalogue each span is, and what is switched on in it. */
  showKinds() {
    findAll(this.box, "item").forEach((item, index) => {
      const span = this.#line[index];
      find(item, "rare-line").textContent = lineEffects([span], this.parameters).join(", ");
      if (!this.#kinds) return;
      const kind = kindOf(span, this.#kinds);
      find(item, "fibre-kind").value = kind?.key ?? "";
      const figures = kind && [`Figures: ${kind.source.replace(/\.$/, "")}.`, kind.note, kind.advice];
      find(item, "fibre-source").textContent = figures ? figures.filter(Boolean).join(" ") : "";
    });
    this.#loadKinds();
  }

  // The figures of a kind depend on the carrier, so another wavelength asks for them again.
  async #loadKinds() {
    const wavelength = this.form.study.experiment.source.wavelength_nm;
    if (!this.stage.open || wavelength === this.#asked) return;
    this.#asked = wavelength;
    try {
      this.#kinds = (await get(api.fibres(wavelength))).kinds;
    } catch {
      return; // The entries below say everything; another wavelength asks again.
    }
    for (const item of findAll(this.box, "item")) this.#offerKinds(item);
    this.showKinds();
  }

  #offerKinds(item) {
    const groups = Map.groupBy(this.#kinds, ({ group }) => group);
    find(item, "fibre").hidden = false;
    const select = find(item, "fibre-kind");
    select.replaceChildren(select.options[0], ...[...groups].map(([label, kinds]) =>
      make("optgroup", { label }, ...kinds.map(({ key, title }) => make("option", { value: key }, title)))));
  }

  #takeKind(select) {
    const index = Number(select.closest("[data-item]").dataset.item);
    const kind = this.#kinds.find(({ key }) => key === select.value);
    this.#line[index] = spanOfKind(this.#line[index], kind, this.parameters);
    this.form.valuesSet();
  }

  #draw(index, count) {
    const item = this.template.content.cloneNode(true).firstElementChild;
    for (const element of [item, ...item.querySelectorAll("*")]) {
      for (const { name, value } of [...element.attributes]) {
        if (value.includes("__n__")) element.setAttribute(name, value.replaceAll("__n__", index));
      }
    }
    if (this.#kinds) this.#offerKinds(item);
    item.querySelector("[data-number]").textContent = index + 1;
    item.querySelector('[data-act="up"]').disabled = index === 0;
    item.querySelector('[data-act="down"]').disabled = index === count - 1;
    item.querySelector('[data-act="remove"]').disabled = count === 1;
    return item;
  }

  #act(target) {
    const { act } = target.dataset;
    if (!act) return;
    const index = Number(target.closest("[data-item]").dataset.item);
    if (act === "remove") {
      this.#line.splice(index, 1);
      this.#rebuilt(Math.max(0, index - 1), '[data-act="remove"]');
      return;
    }
    const other = index + (act === "up" ? -1 : 1);
    [this.#line[index], this.#line[other]] = [this.#line[other], this.#line[index]];
    this.#rebuilt(other, `[data-act="${act}"]`);
  }

  #rebuilt(index, focus) {
    this.render();
    this.form.switches.forgetLine();
    this.form.restructured();
    const item = findAll(this.box, "item")[index];
    (item.querySelector(`${focus}:not(:disabled)`) ?? item.querySelector("input")).focus();
  }
}
