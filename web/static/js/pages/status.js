// The strip above the results: title, state, progress and what may be done with the run.

import { api, pages } from "../model/links.js";
import { patch, post } from "../model/requests.js";
import { brief, duration } from "../model/quantities.js";
import { find } from "./elements.js";
import { attempt, copyLink, toast } from "./shell.js";
import { addToSession } from "./session-dialog.js";

const WORDS = {
  queued: "Queued", running: "Running", cancelled: "Cancelled", failed: "Failed", done: "Done",
};

const MOST_CURVES = 8;

export class Status {
  #run = null;

  /** changed() is called when the strip itself changed the run's state. */
  constructor(root, changed) {
    this.root = root;
    this.changed = changed;
    this.part = (name) => find(root, name);
    this.part("cancel").addEventListener("click", () => this.#change(api.cancel));
    this.part("resume").addEventListener("click", () => this.#change(api.resume));
    this.part("copy-link").addEventListener("click", copyLink);
    this.part("add-session").addEventListener("click", () => addToSession(this.#run.id));
    this.part("run-title").addEventListener("change", (event) => this.#rename(event.target));
  }

  /** Show a run, or null for none. */
  show(run) {
    this.#run = run;
    const shown = Boolean(run);
    this.part("title-row").hidden = !shown;
    this.part("run-tools").hidden = !shown;
    this.broken(false);
    if (!run) {
      this.root.dataset.state = "empty";
      this.part("state-word").textContent = "Nothing run yet";
      this.part("status-text").textContent = "";
      for (const name of ["cancel", "resume", "progress"]) this.part(name).hidden = true;
      document.title = "Bench · Crossdip";
      return;
    }
    const curves = run.variants.slice(0, MOST_CURVES).map((_, variant) => ({ run: run.id, variant }));
    this.part("overlay-link").href = pages.overlay(curves);
    this.refresh();
  }

  refresh() {
    const { row } = this.#run;
    const { state } = row;
    this.root.dataset.state = state;
    this.part("state-word").textContent = WORDS[state];
    this.part("status-text").textContent = this.#sentence(row);
    if (document.activeElement !== this.part("run-title")) this.part("run-title").value = row.title;
    document.title = `${row.title} · Crossdip`;
    const active = this.#run.active;
    this.part("cancel").hidden = !active;
    this.part("resume").hidden = !(state === "cancelled" || state === "failed");
    this.#showProgress(row, active);
    this.#showDownloads(state);
  }

  broken(isBroken) {
    this.part("broken").hidden = !isBroken;
  }

  #sentence({ state, message, progress }) {
    const { fraction, realizations, points_done: done, points_total: total } = progress;
    const counts = `${brief(realizations, 6)} realizations, ${done} of ${total} points settled`;
    if (state === "queued") return message || "Waits for its turn; the page goes on by itself.";
    if (state === "running") {
      const left = duration(progress.seconds_left);
      return counts + (left ? `, about ${left} left` : "");
    }
    if (state === "cancelled") {
      const kept = "What was computed is kept; Continue goes on from it.";
      return `At ${brief(100 * fraction, 3)} %: ${counts}. ${kept}`;
    }
    if (state === "failed") {
      return message || "The server could not finish this run. Continue goes on from what it had.";
    }
    return counts;
  }

  #showProgress({ progress }, active) {
    const bar = this.part("progress");
    const percent = Math.round(100 * progress.fraction);
    bar.hidden = !active;
    bar.setAttribute("aria-valuenow", percent);
    this.part("progress-fill").style.width = `${percent}%`;
  }

  #showDownloads(state) {
    const links = this.root.querySelectorAll("[data-download]");
    for (const link of links) {
      const ready = state === "done" || link.dataset.download === "csv";
      link.setAttribute("aria-disabled", String(!ready));
      link.title = ready ? "" : "Ready when the run is done";
      if (ready) link.href = api[link.dataset.download](this.#run.id);
      else link.removeAttribute("href");
    }
  }

  async #change(address) {
    await attempt(async () => {
      const row = await post(address(this.#run.id));
      Object.assign(this.#run.row, row);
      this.refresh();
      this.changed();
    });
  }

  async #rename(entry) {
    const title = entry.value.trim();
    const renamed = title && (await attempt(async () => {
      Object.assign(this.#run.row, await patch(api.run(this.#run.id), { title }));
      toast("Renamed.", { lasting: 2500 });
    }));
    if (!renamed) entry.value = this.#run.row.title;
    this.refresh();
  }
}
