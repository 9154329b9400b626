// The library: every saved run, searched as one types, and the choice of curves for an overlay.

import { Feed } from "../model/feed.js";
import { api, curvesIn, pages } from "../model/links.js";
import { get } from "../model/requests.js";
import { find, make, say, settled } from "./elements.js";
import { deleteRun, RunRow } from "./run-row.js";
import { openPage } from "./shell.js";

const PAGE_SIZE = 30;
const MOST_CURVES = 8;
const SEARCH_WAIT_MS = 180;

const part = (name) => find(document, name);
const list = part("runs");
const search = part("search");
const rows = new Map();
const chosen = new Map(curvesIn(location.search).map((curve) => [keyOf(curve), curve]));

let mayWrite = true;
let asked = 0;

function keyOf({ run, variant }) {
  return `${run}:${variant}`;
}

const choice = {
  chosen: (curve) => chosen.has(keyOf(curve)),
  toggle(curve, wanted) {
    if (!wanted) chosen.delete(keyOf(curve));
    else if (chosen.size < MOST_CURVES) chosen.set(keyOf(curve), curve);
    showTray();
    return chosen.has(keyOf(curve));
  },
};

async function load(more = false) {
  const number = (asked += 1);
  const offset = more ? rows.size : 0;
  try {
    const { runs, total } = await get(api.runsFound(search.value.trim(), PAGE_SIZE, offset));
    if (number !== asked) return;
    if (!more) {
      rows.clear();
      list.replaceChildren();
    }
    for (const row of runs) add(row);
    say(part("fault"), "");
    part("count").textContent = total === 1 ? "1 run" : `${total} runs`;
    part("more").hidden = rows.size >= total;
    say(part("nothing"), total ? "" : search.value
      ? "No run matches. Search looks at titles, identities and parameters."
      : "No run yet: start one on the Bench.");
  } catch (refusal) {
    say(part("fault"), refusal.message);
  }
}

function add(row, first = false) {
  const acts = mayWrite ? [["Delete", discard]] : [];
  const entry = new RunRow(row, { acts, mayWrite, choice });
  rows.set(row.id, entry);
  if (first) list.prepend(entry.element);
  else list.append(entry.element);
}

function discard(entry) {
  return deleteRun(entry.row, {
    gone() {
      rows.delete(entry.row.id);
      entry.element.remove();
      for (const [key, curve] of chosen) if (curve.run === entry.row.id) chosen.delete(key);
      showTray();
    },
    back: () => load(),
  });
}

function showTray() {
  const curves = [...chosen.values()];
  part("tray").hidden = curves.length === 0;
  part("tray-curves").replaceChildren(...curves.map((curve) => {
    const title = curve.title ?? rows.get(curve.run)?.row.title ?? curve.run;
    const text = `${curve.name ?? `variant ${curve.variant + 1}`} · ${title}`;
    return make("button", {
      type: "button", class: "chip", title: `${text} (click to take out)`, "aria-label": `Take out ${text}`,
      onclick: () => { chosen.delete(keyOf(curve)); showTray(); },
    }, `${text} ×`);
  }));
  part("tray-note").textContent = curves.length < 2
    ? "Choose one more curve at least."
    : `${curves.length} of at most ${MOST_CURVES} curves`;
  const go = part("tray-go");
  go.href = pages.overlay(curves);
  go.hidden = curves.length < 2;
  history.replaceState({}, "", pages.library(curves));
  for (const entry of rows.values()) entry.refreshChoice();
}

function follow() {
  const feed = new Feed({
    address: () => api.events,
    types: ["run"],
    after: "",
    take(_type, row) {
      if (rows.has(row.id)) rows.get(row.id).update(row);
      else if (!search.value) add(row, true);
    },
    broken: () => {},
  });
  feed.open();
  document.addEventListener("visibilitychange", () => (document.hidden ? feed.close() : feed.open()));
  addEventListener("pagehide", () => feed.close());
}

search.addEventListener("input", settled(() => load(), SEARCH_WAIT_MS));
part("more").addEventListener("click", () => load(true));
part("tray-clear").addEventListener("click", () => { chosen.clear(); showTray(); });
mayWrite = await openPage();
await load();
showTray();
follow();
