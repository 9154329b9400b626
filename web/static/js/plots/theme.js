// The theme in force, and the style tokens that the plots share with the style sheet.

const root = document.documentElement;

class Theme extends EventTarget {
  #chosen = "auto";

  constructor() {
    super();
    const tell = () => this.dispatchEvent(new Event("change"));
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", tell);
    new MutationObserver(tell).observe(root, { attributeFilter: ["data-theme"] });
    addEventListener("beforeprint", () => this.#toPaper());
    addEventListener("afterprint", () => { root.dataset.theme = this.#chosen; });
  }

  // Paper is white, and it shows what has never been scrolled into sight as well.
  #toPaper() {
    this.#chosen = root.dataset.theme;
    root.dataset.theme = "light";
    this.dispatchEvent(new Event("print"));
  }

  /** "light" or "dark". */
  get name() {
    const chosen = root.dataset.theme;
    if (chosen === "light" || chosen === "dark") return chosen;
    return matchMedia("(prefers-color-scheme: dark)").matches ? "dark" : "light";
  }
}

export const theme = new Theme();

/** Value of a custom property of the page. */
export const token = (name) =>
  getComputedStyle(root).getPropertyValue(name).trim();
