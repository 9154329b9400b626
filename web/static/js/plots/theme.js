// The theme in force, and the style tokens that the plots share with the style sheet.

class Theme extends EventTarget {
  constructor() {
    super();
    const tell = () => this.dispatchEvent(new Event("change"));
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", tell);
    new MutationObserver(tell).observe(document.documentElement, { attributeFilter: ["data-theme"] });
  }

  /** "light" or "dark". */
  get name() {
    const chosen = document.documentElement.dataset.theme;
    if (chosen === "light" || chosen === "dark") return chosen;
    return matchMedia("(prefers-color-scheme: dark)").matches ? "dark" : "light";
  }
}

export const theme = new Theme();

/** Value of a custom property of the page. */
export const token = (name) =>
  getComputedStyle(document.documentElement).getPropertyValue(name).trim();
