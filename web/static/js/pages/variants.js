// The variants of a study: name, relation and coupling each, and any other change as path = value.

import { variantColour, variantMarker } from "../model/colour.js";
import { changesFrom, changeText, couplingOf, otherChanges, relationOf } from "../model/study.js";
import { theme } from "../plots/theme.js";
import { find, findAll, make, markerIcon } from "./elements.js";

const MOST_VARIANTS = 24;

/** Choose a value in a select, adding it when it is not among the options. */
function choose(select, value) {
  const known = [...select.options].some((option) => option.value === value);
  if (!known) select.append(make("option", { value }, value));
  select.value = value;
}

export class Variants {
  constructor(box, form) {
    Object.assign(this, { box, form });
    this.template = document.getElementById("variant-template");
    this.changeTemplate = document.getElementById("change-template");
    box.addEventListener("click", (event) => this.#act(event.target));
    box.addEventListener("input", (event) => this.#edited(event.target));
    box.addEventListener("change", (event) => this.#edited(event.target));
    theme.addEventListener("change", () => this.#paintSwatches());
  }

  get #variants() {
    return this.form.study.variants;
  }

  render() {
    const only = this.#variants.length === 1;
    this.box.replaceChildren(...this.#variants.map((variant, index) => this.#draw(variant, index, only)));
    this.#paintSwatches();
  }

  add() {
    if (this.#variants.length >= MOST_VARIANTS) return;
    const names = new Set(this.#variants.map((variant) => variant.name));
    let number = this.#variants.length + 1;
    while (names.has(`variant ${number}`)) number += 1;
    const { changes } = this.#variants.at(-1) ?? { changes: {} };
    this.#variants.push({ name: `variant ${number}`, changes: structuredClone(changes) });
    this.render();
    this.form.restructured();
    find(this.box.lastElementChild, "name").select();
  }

  #draw(variant, index, only) {
    const item = this.template.content.cloneNode(true).firstElementChild;
    item.dataset.item = index;
    find(item, "label").textContent = `Variant ${index + 1}`;
    find(item, "name").value = variant.name;
    choose(find(item, "relation"), relationOf(variant.changes));
    choose(find(item, "coupling"), couplingOf(variant.changes));
    find(item, "fault").dataset.faultFor = `variants.${index}`;
    item.querySelector('[data-act="remove"]').disabled = only;
    const rows = otherChanges(variant.changes).map(([path, value]) => this.#row(path, changeText(value)));
    find(item, "changes").append(...rows);
    return item;
  }

  #row(path, text) {
    const row = this.changeTemplate.content.cloneNode(true).firstElementChild;
    if (path) choose(find(row, "change-path"), path);
    find(row, "change-value").value = text;
    return row;
  }

  #paintSwatches() {
    findAll(this.box, "swatch").forEach((swatch, index) => {
      swatch.replaceChildren(markerIcon(variantMarker(index), variantColour(theme.name, index)));
    });
  }

  #act(target) {
    const { act } = target.dataset;
    if (!act) return;
    const item = target.closest("[data-item]");
    if (act === "remove") {
      this.#variants.splice(Number(item.dataset.item), 1);
      this.render();
      this.form.restructured();
      find(this.box, "name").focus();
    } else if (act === "change") {
      const row = this.#row("", "");
      find(item, "changes").append(row);
      find(row, "change-path").focus();
    } else {
      target.closest(".change").remove();
      this.#take(item);
      find(item, "name").focus();
    }
  }

  #edited(target) {
    const item = target.closest("[data-item]");
    if (item) this.#take(item);
  }

  #take(item) {
    const rows = [...find(item, "changes").children].map((row) => ({
      path: find(row, "change-path").value,
      text: find(row, "change-value").value,
    }));
    this.#variants[Number(item.dataset.item)] = {
      name: find(item, "name").value.trim(),
      changes: changesFrom(find(item, "relation").value, find(item, "coupling").value, rows),
    };
    this.form.variantEdited();
  }
}
