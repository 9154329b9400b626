// The density of polarization states on the Stokes sphere, orthographic, turned by drag or keys.

import { css, DENSITY_MAP } from "../model/colour.js";
import { brief } from "../model/quantities.js";
import { axisEnds, Bins, circles, View } from "../model/sphere.js";
import { csv, saveText, wrapped } from "./export.js";
import { theme, token } from "./theme.js";

const BAR_STEPS = 32;
const STEP_DEGREES = 6;
const KEYS = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, 1], ArrowDown: [0, -1] };
const FACES = { S1: [0, 0], S2: [90, 0], S3: [0, 90] };
const START = [35, 24];
const UNIFORM = 1 / (4 * Math.PI);
const FOOT = { top: 20, line: 13.5, size: 10 };
const HINT = "Drag it, or use the arrow keys, to turn it.";

/** What a picture is made of, in one place for the screen and for the drawing that is saved. */
class Picture {
  constructor({ bins, density }, view, width, height) {
    this.top = Math.max(...density, 2 * UNIFORM);
    this.radius = Math.max(10, Math.min(width - 118, height - 44) / 2);
    this.x = (width - 74) / 2;
    this.y = height / 2;
    const spot = ([across, up]) => [this.x + this.radius * across, this.y - this.radius * up];
    const colour = (value) => css(DENSITY_MAP[Math.round(255 * Math.min(1, Math.max(0, value / this.top)))]);
    this.faces = bins.seen(view).map(({ index, corners }) => ({
      colour: colour(density[index] ?? 0), corners: corners.map(spot),
    }));
    this.lines = circles(view).map((piece) => piece.map(spot));
    this.labels = axisEnds(view).filter(({ near }) => near).map(({ name, across, up }) => {
      // The end of an axis that points at the reader has its name above it, the others outside.
      const [x, y] = spot([across, up]);
      const size = Math.hypot(across, up);
      const away = size > 0.4 ? [across / size, up / size] : [0, 1];
      return { name, x: x + 14 * away[0], y: y - 14 * away[1], spot: [x, y] };
    });
    const [left, foot, tall] = [width - 58, height / 2 + 70, 140];
    this.bar = Array.from({ length: BAR_STEPS }, (_, i) => ({
      x: left, y: foot - (tall * (i + 1)) / BAR_STEPS, width: 10, height: tall / BAR_STEPS + 0.5,
      colour: colour((this.top * (i + 0.5)) / BAR_STEPS),
    }));
    this.ticks = [0, this.top / 2, this.top].map((value) => ({
      text: brief(value, 2), x: left + 14, y: foot - (tall * value) / this.top,
    }));
    this.uniform = { x: left, y: foot - (tall * UNIFORM) / this.top };
    this.title = { text: "1/sr", x: left, y: foot - tall - 10 };
  }
}

export class SpherePlot {
  #found = null;
  #view = new View(...START);
  #held = null;
  #asked = false;

  /** element: the box; readout: element that tells what is under the pointer. */
  constructor(element, readout) {
    Object.assign(this, { element, readout });
    this.canvas = document.createElement("canvas");
    element.append(this.canvas);
    element.addEventListener("keydown", (event) => this.#key(event));
    element.addEventListener("pointerdown", (event) => {
      this.#held = [event.clientX, event.clientY];
      element.setPointerCapture(event.pointerId);
    });
    element.addEventListener("pointermove", (event) => this.#move(event));
    element.addEventListener("pointerup", () => { this.#held = null; });
    element.addEventListener("pointerleave", () => { this.readout.textContent = HINT; });
    new ResizeObserver(() => this.#soon()).observe(element);
    theme.addEventListener("change", () => this.#soon());
    theme.addEventListener("print", () => this.#paint());
  }

  /** Show densities, 1/sr, and their standard errors: rows of equal S3/S0, columns of azimuth. */
  show({ density, standard_error: errors }) {
    const bins = new Bins(density.length, density[0].length);
    this.#found = { bins, density: density.flat(), errors: errors.flat() };
    delete this.element.dataset.instead;
    this.canvas.hidden = false;
    this.#soon();
  }

  /** Show a sentence in place of the picture. */
  clear(text) {
    this.#found = null;
    this.element.dataset.instead = text;
    this.canvas.hidden = true;
  }

  /** Look along an axis: S1, S2 or S3. */
  face(axis) {
    this.#turnTo(new View(...FACES[axis]));
  }

  resetAxes() {
    this.#turnTo(new View(...START));
  }

  saveData(filename, comments) {
    if (!this.#found) return;
    const { bins, density, errors } = this.#found;
    const rows = density.map((value, i) => [...bins.centre(i), value, errors[i]]);
    const heads = ["S3/S0", "azimuth of (S1, S2) (deg)", "density (1/sr)", "standard error (1/sr)"];
    saveText(csv(comments, heads, rows), `${filename}.csv`, "text/csv");
  }

  save(filename, foot = []) {
    if (!this.#found) return;
    const lines = wrapped(foot);
    const [width, tall] = [900, 560];
    const picture = new Picture(this.#found, this.#view, width, tall);
    saveText(svgOf(picture, width, tall, lines), `${filename}.svg`, "image/svg+xml");
  }

  #turnTo(view) {
    this.#view = view;
    this.element.dataset.view = `${view.longitude} ${view.latitude}`;
    this.#soon();
  }

  #key(event) {
    const step = KEYS[event.key];
    if (!step || event.ctrlKey || event.metaKey || event.altKey) return;
    event.preventDefault();
    this.#turnTo(this.#view.turned(STEP_DEGREES * step[0], STEP_DEGREES * step[1]));
  }

  #move(event) {
    if (this.#held) {
      const [x, y] = this.#held;
      this.#held = [event.clientX, event.clientY];
      const degrees = 57 / (this.picture?.radius ?? 100);
      this.#turnTo(this.#view.turned((x - event.clientX) * degrees, (event.clientY - y) * degrees));
    } else this.#tell(event);
  }

  #tell({ clientX, clientY }) {
    if (!this.picture || !this.#found) return;
    const box = this.canvas.getBoundingClientRect();
    const across = (clientX - box.left - this.picture.x) / this.picture.radius;
    const up = (this.picture.y - (clientY - box.top)) / this.picture.radius;
    const point = this.#view.pointAt(across, up);
    if (!point) {
      this.readout.textContent = HINT;
      return;
    }
    const place = point.map((s, i) => `S${i + 1} ${brief(Number(s.toFixed(2)), 2)}`).join(", ");
    const value = this.#found.density[this.#found.bins.at(point)];
    this.readout.textContent =
      `${place}: ${brief(value, 3)} /sr, ${brief(value / UNIFORM, 3)} times the uniform density`;
  }

  #soon() {
    if (this.#asked) return;
    this.#asked = true;
    requestAnimationFrame(() => {
      this.#asked = false;
      this.#paint();
    });
  }

  #paint() {
    const { width, height } = this.element.getBoundingClientRect();
    if (!this.#found || !width || !height) return;
    const ratio = window.devicePixelRatio || 1;
    this.canvas.width = width * ratio;
    this.canvas.height = height * ratio;
    const pen = this.canvas.getContext("2d");
    pen.scale(ratio, ratio);
    this.picture = new Picture(this.#found, this.#view, width, height);
    for (const { corners, colour } of this.picture.faces) {
      pen.beginPath();
      corners.forEach(([x, y], i) => (i ? pen.lineTo(x, y) : pen.moveTo(x, y)));
      pen.closePath();
      // The stroke closes the hair cracks between neighbours.
      pen.fillStyle = pen.strokeStyle = colour;
      pen.lineWidth = 0.6;
      pen.fill();
      pen.stroke();
    }
    this.#inkLines(pen);
    this.#inkWords(pen);
  }

  #inkLines(pen) {
    pen.strokeStyle = "#ffffff90";
    pen.lineWidth = 1;
    for (const line of this.picture.lines) {
      pen.beginPath();
      line.forEach(([x, y], i) => (i ? pen.lineTo(x, y) : pen.moveTo(x, y)));
      pen.stroke();
    }
    for (const { x, y, width, height, colour } of this.picture.bar) {
      pen.fillStyle = colour;
      pen.fillRect(x, y, width, height);
    }
    const { x, y } = this.picture.uniform;
    pen.fillStyle = token("--ink");
    pen.fillRect(x - 5, y - 0.5, 16, 1.5);
  }

  #inkWords(pen) {
    pen.font = `600 12px ${token("--font")}`;
    pen.fillStyle = token("--ink");
    pen.textAlign = "center";
    pen.textBaseline = "middle";
    pen.strokeStyle = token("--panel");
    pen.lineWidth = 3;
    pen.lineJoin = "round";
    for (const { name, x, y, spot } of this.picture.labels) {
      pen.strokeText(name, x, y);
      pen.fillText(name, x, y);
      pen.beginPath();
      pen.arc(...spot, 2.5, 0, 2 * Math.PI);
      pen.fill();
    }
    pen.font = `11px ${token("--font")}`;
    pen.fillStyle = token("--ink-2");
    pen.textAlign = "left";
    for (const { text, x, y } of [...this.picture.ticks, this.picture.title]) pen.fillText(text, x, y);
  }
}

const escaped = (text) => text.replaceAll("&", "&amp;").replaceAll("<", "&lt;");

function svgOf(picture, width, tall, lines) {
  const height = tall + FOOT.top + FOOT.line * lines.length;
  const ink = token("--ink");
  const path = (points) => points.map(([x, y], i) => `${i ? "L" : "M"}${x.toFixed(1)} ${y.toFixed(1)}`).join("");
  const text = (x, y, words, more = "") =>
    `<text x="${x.toFixed(1)}" y="${y.toFixed(1)}" ${more}>${escaped(words)}</text>`;
  return [
    `<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 ${width} ${height}" width="${width}" height="${height}" ` +
      `font-family="sans-serif" font-size="12" fill="${ink}">`,
    `<rect width="100%" height="100%" fill="${token("--panel")}"/>`,
    ...picture.faces.map(({ corners, colour }) =>
      `<path d="${path(corners)}Z" fill="${colour}" stroke="${colour}" stroke-width="0.6"/>`),
    ...picture.lines.map((line) => `<path d="${path(line)}" fill="none" stroke="#ffffff" stroke-opacity="0.56"/>`),
    ...picture.labels.map(({ name, x, y, spot }) =>
      `<circle cx="${spot[0].toFixed(1)}" cy="${spot[1].toFixed(1)}" r="2.5"/>` +
      text(x, y + 4, name, `text-anchor="middle" font-weight="600" paint-order="stroke" stroke="${token("--panel")}" stroke-width="3"`)),
    ...picture.bar.map((step) =>
      `<rect x="${step.x}" y="${step.y.toFixed(1)}" width="${step.width}" height="${step.height.toFixed(1)}" ` +
      `fill="${step.colour}"/>`),
    `<rect x="${picture.uniform.x - 5}" y="${(picture.uniform.y - 0.5).toFixed(1)}" width="16" height="1.5"/>`,
    ...[...picture.ticks, picture.title].map((one) => text(one.x, one.y + 4, one.text, 'font-size="11"')),
    text(12, 20, "Density of polarization states on the Stokes sphere (1/sr); the mark on the bar is the uniform density"),
    ...lines.map((line, i) => text(12, tall + FOOT.top + FOOT.line * i, line, `font-size="${FOOT.size}"`)),
    "</svg>",
  ].join("\n");
}
