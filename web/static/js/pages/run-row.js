// One run in a list: picture, title, date, state with progress, and what may be done with it.

import { api } from "../model/links.js";
import { get, patch, post, remove } from "../model/requests.js";
import { duration } from "../model/quantities.js";
import { dateText, make } from "./elements.js";
import { attempt, toast } from "./shell.js";

const WORDS = {
  queued: "queued", running: "running", cancelled: "cancelled", failed: "failed", done: "done",
};

export class RunRow {
  /** acts: buttons of the list that shows this row; mayWrite: whether the title may be changed. */
  constructor(row, { acts = [], mayWrite = true, choice = null } = {}) {
    this.row = row;
    this.picture = make("img", { alt: "", width: 120, height: 72, loading: "lazy" });
    this.state = make("span", { class: "state" });
    this.bar = make("span", { class: "small-progress", "aria-hidden": "true" }, make("span"));
    this.title = make("input", {
      type: "text", class: "row-title", maxlength: 200, "aria-label": "Title of the run", autocomplete: "off",
      readonly: !mayWrite, onchange: () => this.#rename(),
    });
    this.choices = make("div", { class: "curve-choices" });
    this.element = make("li", { class: "run", "data-run-id": row.id },
      make("a", { href: row.links.page, class: "picture", "aria-label": `Open ${row.title}` }, this.picture),
      make("div", { class: "run-body" }, this.title,
        make("p", { class: "run-line" }, this.state, this.bar,
          make("time", { datetime: row.created }, dateText(row.created))),
        this.choices),
      make("div", { class: "run-acts" }, make("a", { class: "button", href: row.links.page }, "Open"),
        ...acts.map(([label, act]) => make("button", { type: "button", onclick: () => act(this) }, label))),
    );
    if (choice) this.#offerChoice(choice);
    this.update(row);
  }

  update(row) {
    const points = row.progress.points_done;
    if (this.pointsPictured !== points) {
      this.pointsPictured = points;
      this.picture.src = `${row.links.picture}?points=${points}`;
    }
    this.row = row;
    if (document.activeElement !== this.title) this.title.value = row.title;
    this.state.dataset.state = row.state;
    const left = row.state === "running" ? duration(row.progress.seconds_left) : "";
    const problems = row.problems ? `, ${row.problems} flagged` : "";
    this.state.textContent = WORDS[row.state] + (left ? `, about ${left} left` : "") + problems;
    this.bar.hidden = row.state !== "running";
    this.bar.firstElementChild.style.width = `${Math.round(100 * row.progress.fraction)}%`;
  }

  async #rename() {
    const title = this.title.value.trim();
    const renamed = title && (await attempt(async () => {
      this.update(await patch(api.run(this.row.id), { title }));
    }));
    if (!renamed) this.title.value = this.row.title;
  }

  /** A fold that lists the run's curves once it is opened, each with a box to tick. */
  #offerChoice({ chosen, toggle }) {
    const fold = make("details", { class: "curves" }, make("summary", {}, "Curves for the overlay"));
    fold.addEventListener("toggle", async () => {
      if (!fold.open || this.boxes) return;
      await attempt(async () => {
        const { study } = await get(api.run(this.row.id));
        this.boxes = study.variants.map(({ name }, variant) => {
          const curve = { run: this.row.id, variant, name, title: this.row.title };
          const box = make("input", { type: "checkbox", checked: chosen(curve), onchange: () => {
            box.checked = toggle(curve, box.checked);
          } });
          return { curve, box };
        });
        fold.append(...this.boxes.map(({ curve, box }) => make("label", {}, box, ` ${curve.name}`)));
      });
    });
    this.chosen = chosen;
    this.choices.append(fold);
  }

  /** The choice has changed elsewhere. */
  refreshChoice() {
    for (const { curve, box } of this.boxes ?? []) box.checked = this.chosen(curve);
  }
}

/** Delete a run, with the way back in a toast. */
export async function deleteRun(row, { gone, back }) {
  await attempt(async () => {
    await remove(api.run(row.id));
    gone();
    toast(`Deleted “${row.title}”.`, {
      label: "Undo", act: () => attempt(async () => back(await post(api.restoreRun(row.id)))),
    });
  });
}
