// The spans of the line: added, removed and put in order.

import { findAll } from "./elements.js";

const MOST_SPANS = 64;

export class Spans {
  constructor(box, form, model) {
    Object.assign(this, { box, form, model });
    this.template = document.getElementById("span-template");
    box.addEventListener("click", (event) => this.#act(event.target));
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

  #draw(index, count) {
    const item = this.template.content.cloneNode(true).firstElementChild;
    for (const element of [item, ...item.querySelectorAll("*")]) {
      for (const { name, value } of [...element.attributes]) {
        if (value.includes("__n__")) element.setAttribute(name, value.replaceAll("__n__", index));
      }
    }
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
    this.form.restructured();
    const item = findAll(this.box, "item")[index];
    (item.querySelector(`${focus}:not(:disabled)`) ?? item.querySelector("input")).focus();
  }
}
