// The measured spectrum of a source: imported from a file, shown, and what was done to it said.

import { api } from "../model/links.js";
import { brief, parseNumber } from "../model/quantities.js";
import { postText } from "../model/requests.js";
import { sparkline } from "../plots/sparkline.js";
import { find, findAll, make, say } from "./elements.js";

const PREVIEW_POINTS = 400;

export class Spectrum {
  #text = null;
  #shown = null;

  /** box: the element of the entry; form: the StudyForm. */
  constructor(box, form) {
    Object.assign(this, { box, form });
    this.part = (name) => find(box, `spectrum-${name}`);
    this.part("import").addEventListener("click", () => this.part("file").click());
    this.part("file").addEventListener("change", ({ target }) => {
      if (target.files.length) this.#take(target.files[0]);
      target.value = "";
    });
    this.choices = findAll(box, "spectrum-choice");
    for (const choice of this.choices) choice.addEventListener("change", () => this.#text && this.#send());
    this.part("floor").addEventListener("click", () => this.#takeFloorOff());
    this.#acceptDrops(find(box, "drop"));
  }

  get #source() {
    return this.form.study.experiment.source;
  }

  /** Show the spectrum that the study holds. */
  show() {
    const { measured } = this.#source;
    if (measured === this.#shown) return;
    this.#shown = measured;
    this.part("preview").hidden = !measured;
    if (!measured) {
      this.part("about").textContent = "";
      say(this.part("remarks"), "");
      return;
    }
    const { offset_ghz: offsets, density, name } = measured;
    const stride = Math.ceil(offsets.length / PREVIEW_POINTS);
    const kept = offsets.map((_, i) => i).filter((i) => i % stride === 0);
    const peak = Math.max(...density);
    this.part("preview").replaceChildren(
      sparkline(kept.map((i) => offsets[i]), kept.map((i) => density[i] / peak), {
        x: "Offset (GHz)", y: "Power density / peak",
      }),
    );
    const ends = `${brief(offsets[0])} to ${brief(offsets.at(-1))} GHz`;
    this.part("about").textContent = `${name || "Measured spectrum"}: ${offsets.length} points, ${ends}.`;
  }

  #acceptDrops(box) {
    const over = (event) => {
      event.preventDefault();
      box.classList.add("over");
    };
    box.addEventListener("dragenter", over);
    box.addEventListener("dragover", over);
    box.addEventListener("dragleave", () => box.classList.remove("over"));
    box.addEventListener("drop", (event) => {
      event.preventDefault();
      box.classList.remove("over");
      const [file] = event.dataTransfer.files;
      if (file) this.#take(file);
    });
  }

  async #take(file) {
    this.#text = { name: file.name, body: file };
    await this.#send();
  }

  async #send() {
    const { name, body } = this.#text;
    const fault = this.box.querySelector(".fault");
    say(fault, "");
    this.part("import").disabled = true;
    try {
      const { source, remarks, suggested } = await postText(api.spectra({ ...this.#asked(), name }), body);
      source.measured.name ||= name;
      Object.assign(this.#source, { shape: "measured", ...source });
      this.form.valuesSet();
      this.#suggest(suggested.floor_db);
      this.part("remarks").replaceChildren(...remarks.map((text) => make("li", {}, text)));
      this.part("remarks").hidden = remarks.length === 0;
    } catch (refusal) {
      say(fault, `${name}: ${refusal.message}`);
    } finally {
      this.part("import").disabled = false;
    }
  }

  /** What has been said about the file: every choice made, a floor as a number. */
  #asked() {
    const said = this.choices.map(({ dataset, value }) => [dataset.spectrumChoice, value.trim()]);
    return Object.fromEntries(
      said.filter(([, value]) => value && value !== "auto")
        .map(([name, value]) => [name, name === "floor_db" ? (parseNumber(value) ?? value) : value]),
    );
  }

  #suggest(floorDb) {
    this.floorDb = floorDb;
    this.part("floor").hidden = floorDb === null;
    if (floorDb !== null) this.part("floor").textContent = `Take off the floor, ${brief(floorDb, 3)} dB below the top`;
  }

  #takeFloorOff() {
    this.choices.find(({ dataset }) => dataset.spectrumChoice === "floor_db").value = String(this.floorDb);
    this.#send();
  }
}
