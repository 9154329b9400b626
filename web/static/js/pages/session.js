// One session: its runs, and notes that save themselves.

import { api, identityIn, pages } from "../model/links.js";
import { get, patch, put, remove } from "../model/requests.js";
import { dateText, find, say, settled } from "./elements.js";
import { RunRow } from "./run-row.js";
import { attempt, copyLink, openPage, toast } from "./shell.js";

const SAVE_WAIT_MS = 700;
const MOST_CURVES = 8;

const part = (name) => find(document, name);
const id = identityIn(location.pathname);
const notes = part("notes");

let mayWrite = true;
let saved = "";
let name = "";

async function load() {
  try {
    const session = await get(api.session(id));
    name = session.name;
    showName();
    part("dates").textContent = `created ${dateText(session.created)}`;
    if (notes.value === saved) notes.value = session.notes;
    saved = session.notes;
    showRuns(session.runs);
    say(part("fault"), "");
  } catch (refusal) {
    const gone = "There is no session at this address: it may have been deleted.";
    say(part("fault"), refusal.status === 404 ? gone : refusal.message);
  }
}

function showName() {
  part("name").value = name;
  part("heading").textContent = name;
  document.title = `${name} · Crossdip`;
}

function showRuns(runs) {
  const acts = mayWrite ? [["Take out", takeOut]] : [];
  const entries = runs.map((row) => new RunRow(row, { acts, mayWrite }).element);
  part("runs").replaceChildren(...entries);
  part("nothing").hidden = runs.length > 0;
  const all = part("overlay-all");
  all.hidden = runs.length < 2;
  all.href = pages.overlay(runs.slice(0, MOST_CURVES).map((row) => ({ run: row.id, variant: 0 })));
}

async function takeOut({ row }) {
  await attempt(async () => {
    await remove(api.sessionRun(id, row.id));
    await load();
    toast(`Took “${row.title}” out of the session.`, {
      label: "Undo",
      act: () => attempt(async () => {
        await put(api.sessionRun(id, row.id));
        await load();
      }),
    });
  });
}

async function saveNotes() {
  const text = notes.value;
  if (text === saved) return;
  try {
    await patch(api.session(id), { notes: text });
    saved = text;
    part("saved").textContent = "Notes saved.";
  } catch (refusal) {
    part("saved").textContent = `Not saved: ${refusal.message} The text stays here; type on to try again.`;
  }
}

notes.addEventListener("input", () => { part("saved").textContent = "Not saved yet…"; });
notes.addEventListener("input", settled(saveNotes, SAVE_WAIT_MS));
notes.addEventListener("blur", saveNotes);
// Leaving in the middle of a sentence must not lose it: keepalive lets the request outlive the page.
addEventListener("pagehide", () => {
  if (notes.value === saved) return;
  fetch(api.session(id), {
    method: "PATCH", keepalive: true, body: JSON.stringify({ notes: notes.value }),
    headers: { "Content-Type": "application/json" },
  });
});
part("name").addEventListener("change", async (event) => {
  const wanted = event.target.value.trim();
  if (wanted && (await attempt(() => patch(api.session(id), { name: wanted })))) name = wanted;
  showName();
});
part("copy-link").addEventListener("click", copyLink);
mayWrite = await openPage();
notes.readOnly = !mayWrite;
part("name").readOnly = !mayWrite;
await load();
