// Building and finding parts of the document.

/** The one element with a data attribute, below root: find(root, "run-title"). */
export const find = (root, name) => root.querySelector(`[data-${name}]`);

export const findAll = (root, name) => [...root.querySelectorAll(`[data-${name}]`)];

/** A new element: make("a", {href, class, onclick, "aria-label"}, ...children). */
export function make(tag, attributes = {}, ...children) {
  const element = document.createElement(tag);
  for (const [name, value] of Object.entries(attributes)) {
    if (value === false || value === null || value === undefined) continue;
    if (name.startsWith("on")) element.addEventListener(name.slice(2), value);
    else element.setAttribute(name, value === true ? "" : value);
  }
  element.append(...children.filter((child) => child !== null && child !== undefined));
  return element;
}

/** Show or hide an element that holds one sentence; no text hides it. */
export function say(element, text) {
  element.textContent = text ?? "";
  element.hidden = !text;
}

/** Call act once things have been quiet for a while. */
export function settled(act, waitMs) {
  let timer = null;
  return (...args) => {
    clearTimeout(timer);
    timer = setTimeout(() => act(...args), waitMs);
  };
}

/** A date as people here write it. */
export const dateText = (iso) =>
  new Date(iso).toLocaleString(undefined, { dateStyle: "medium", timeStyle: "short" });

const SVG = "http://www.w3.org/2000/svg";

const SHAPES = {
  circle: ["circle", { cx: 8, cy: 8, r: 4.6 }],
  square: ["path", { d: "M3.6 3.6h8.8v8.8h-8.8z" }],
  diamond: ["path", { d: "M8 2l6 6-6 6-6-6z" }],
  "triangle-up": ["path", { d: "M8 2.5l5.6 10h-11.2z" }],
  cross: ["path", { d: "M6 2.5h4v3.5h3.5v4h-3.5v3.5h-4v-3.5h-3.5v-4h3.5z" }],
  "triangle-down": ["path", { d: "M8 13.5l5.6-10h-11.2z" }],
  x: ["path", { d: "M4.6 2l3.4 3.4 3.4-3.4 2.6 2.6-3.4 3.4 3.4 3.4-2.6 2.6-3.4-3.4-3.4 3.4-2.6-2.6 3.4-3.4-3.4-3.4z" }],
  pentagon: ["path", { d: "M8 2l5.7 4.2-2.2 6.8h-7l-2.2-6.8z" }],
  hexagram: ["path", { d: "M8 1.5l1.9 3.2h3.7l-1.9 3.3 1.9 3.3h-3.7l-1.9 3.2-1.9-3.2h-3.7l1.9-3.3-1.9-3.3h3.7z" }],
};

/** A small drawing of a curve's marker in its colour. */
export function markerIcon(shape, colour) {
  const [tag, attributes] = SHAPES[shape];
  const icon = document.createElementNS(SVG, "svg");
  icon.setAttribute("viewBox", "0 0 16 16");
  icon.setAttribute("width", "14");
  icon.setAttribute("height", "14");
  icon.setAttribute("aria-hidden", "true");
  const body = document.createElementNS(SVG, tag);
  for (const [name, value] of Object.entries(attributes)) body.setAttribute(name, value);
  body.setAttribute("fill", colour);
  icon.append(body);
  return icon;
}
