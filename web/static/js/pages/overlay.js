// Curves of any runs on one set of axes, with the parameters that differ between them.

import { variantColour, variantMarker } from "../model/colour.js";
import { api, curvesIn, pages } from "../model/links.js";
import { get } from "../model/requests.js";
import { brief, sweepAxis } from "../model/quantities.js";
import { dipFigure } from "../plots/dip.js";
import { Surface } from "../plots/surface.js";
import { theme } from "../plots/theme.js";
import { find, make, markerIcon, say } from "./elements.js";
import { Legend } from "./legend.js";
import { copyLink, openPage, powerUnit } from "./shell.js";

const part = (name) => find(document, name);
const surface = new Surface(document.querySelector('[data-plot="overlay"]'));
const legend = new Legend(part("legend"), () => draw());

let overlay = null;
let names = [];

async function load() {
  const chosen = curvesIn(location.search);
  part("library-link").href = pages.library(chosen);
  part("empty").hidden = chosen.length > 0;
  if (!chosen.length) return;
  try {
    overlay = await get(api.overlay(chosen));
  } catch (refusal) {
    say(part("fault"), refusal.message);
    return;
  }
  names = namesOf(overlay.curves);
  part("body").hidden = false;
  legend.show(names);
  draw();
}

/** Names that tell the curves apart: variant and run, with the run's identity where titles repeat. */
function namesOf(curves) {
  const titles = new Map();
  for (const { title, run } of curves) titles.set(title, (titles.get(title) ?? new Set()).add(run));
  return curves.map(({ name, title, run }) =>
    titles.get(title).size > 1 ? `${name} · ${title} (${run.slice(0, 4)})` : `${name} · ${title}`);
}

function draw() {
  const axes = overlay.curves.map(({ sweep }) => sweepAxis(sweep, powerUnit.value));
  const [sweep] = axes;
  const top = axes.find((axis) => axis.title !== sweep.title) ?? null;
  const left = [];
  const curves = overlay.curves.flatMap((curve, index) => {
    const own = axes[index];
    const xaxis = own.title === sweep.title ? "x" : own.title === top.title ? "x2" : null;
    if (xaxis === null) left.push(names[index]);
    if (xaxis === null || !legend.shows(index)) return [];
    return [{ name: names[index], index, x: own.values, points: curve.points, xaxis }];
  });
  surface.draw(() => dipFigure({ curves, sweep, top }));
  const remarks = [];
  if (top) remarks.push(`Two parameters are swept: ${sweep.title} below, ${top.title} above.`);
  if (left.length) remarks.push(`Not drawn, as a third parameter is swept: ${left.join("; ")}.`);
  const every = overlay.curves.flatMap(({ points }) => points);
  const flagged = every.filter((one) => one && one.outcome !== "completed").length;
  if (flagged) remarks.push(`Flagged points are marked at the foot, not drawn as values: ${flagged}.`);
  say(part("remarks"), remarks.join(" "));
  showDifferences();
}

function showDifferences() {
  const table = part("differences");
  const heads = overlay.curves.map((curve, index) =>
    make("th", { scope: "col" },
      markerIcon(variantMarker(index), variantColour(theme.name, index)),
      make("a", { href: pages.run(curve.run) }, ` ${names[index]}`)),
  );
  const rows = overlay.differences.map(({ title, unit, values, path }) =>
    make("tr", {},
      make("th", { scope: "row", title: path }, unit ? `${title} (${unit})` : title),
      ...values.map((value) => make("td", {}, valueText(value)))),
  );
  if (!rows.length) {
    const text = "Nothing: the curves answer the same question.";
    rows.push(make("tr", {}, make("td", { colspan: heads.length + 1 }, text)));
  }
  table.replaceChildren(
    make("thead", {}, make("tr", {}, make("th", { scope: "col" }, "Parameter"), ...heads)),
    make("tbody", {}, ...rows),
  );
}

function valueText(value) {
  if (value === null || value === undefined) return "none";
  if (typeof value === "number") return brief(value, 6);
  return typeof value === "string" ? value.replaceAll("_", " ") : JSON.stringify(value);
}

/** What the curves are and in what they differ, for the files that leave the page. */
function about() {
  const curves = overlay.curves.map(({ run }, index) => `${names[index]}: run ${run}`);
  const differing = overlay.differences.map(({ path, unit, values }) =>
    `${path}${unit ? ` (${unit})` : ""}: ${values.map(valueText).join("; ")}`);
  return [...curves, ...differing];
}

document.querySelector('[data-save="overlay"]').addEventListener("click", () => surface.save("overlay", about()));
document.querySelector('[data-csv="overlay"]').addEventListener("click", () => surface.saveData("overlay", about()));
document.querySelector('[data-reset="overlay"]').addEventListener("click", () => surface.resetAxes());
part("copy-link").addEventListener("click", copyLink);
powerUnit.attach(part("power-unit"));
powerUnit.addEventListener("change", () => overlay && draw());
theme.addEventListener("change", () => overlay && showDifferences());
openPage();
load();
