// The bench: the study form, the run that it starts, and that run's results as they arrive.

import { Feed } from "../model/feed.js";
import { api, identityIn, pages } from "../model/links.js";
import { get, post } from "../model/requests.js";
import { Run, TERMINAL } from "../model/run.js";
import { sameStudy } from "../model/study.js";
import { saveText } from "../plots/export.js";
import { plotly } from "../plots/surface.js";
import { find } from "./elements.js";
import { StudyForm } from "./form.js";
import { Results } from "./results.js";
import { openPage, toast } from "./shell.js";
import { Status } from "./status.js";

const EVENT_TYPES = ["state", "progress", "point", "map", "reset"];

const data = JSON.parse(document.getElementById("bench-data").textContent);
const form = new StudyForm(find(document, "study"), data);
const results = new Results(find(document, "results"), data.parameters);
const status = new Status(find(document, "status"), () => follow());
const runButton = find(document, "run");

let run = null;
let feed = null;

function show(next) {
  feed?.end();
  feed = null;
  run = next;
  status.show(run);
  results.show(run);
  showEdited();
  follow();
}

function follow() {
  feed?.end();
  feed = null;
  if (!run?.active) return;
  const own = run;
  feed = new Feed({
    address: (after) => api.runEvents(own.id, after),
    types: EVENT_TYPES,
    after: own.followFrom,
    take: (type, event) => take(own, type, event),
    broken: (isBroken) => status.broken(isBroken),
  });
  if (!document.hidden) feed.open();
}

function take(own, type, event) {
  if (own !== run) return;
  own.sequence = feed.after;
  if (type === "reset") {
    reread(own);
    return;
  }
  if (type !== "map" && !own.isNews(feed.after)) return;
  const changed = own.apply(type, event);
  if (type === "state" || type === "progress") status.refresh();
  results.took(type, changed);
  if (type === "state" && TERMINAL.has(event.state)) {
    feed.end();
    reread(own);
  }
}

/** Read the run's view again, after a reset of the stream or at the run's end. */
async function reread(own) {
  const following = feed;
  try {
    const view = await get(api.view(own.id));
    // A run that was taken up again meanwhile is further than this view.
    if (own !== run || following !== feed) return;
    own.renew(view);
    status.refresh();
    results.renewed();
  } catch (refusal) {
    toast(refusal.message, { fault: true });
  }
}

async function openRun(id) {
  try {
    const view = await get(api.view(id));
    form.load(view.study);
    show(new Run(view));
  } catch (refusal) {
    show(null);
    const gone = "There is no run at this address: it may have been deleted.";
    const text = refusal.status === 404 ? gone : refusal.message;
    toast(text, { fault: true, lasting: 60_000 });
  }
}

async function start() {
  if (runButton.disabled) return;
  form.clearRefusals();
  if (!form.valid) {
    form.revealFirstFault();
    return;
  }
  runButton.disabled = true;
  try {
    const row = await post(api.runs, form.study);
    if (location.pathname !== pages.run(row.id)) history.pushState({}, "", pages.run(row.id));
    const view = await get(api.view(row.id));
    show(new Run(view));
  } catch (refusal) {
    form.refuse({ where: refusal.where ?? "", message: refusal.message });
  } finally {
    runButton.disabled = document.body.classList.contains("may-only-look");
  }
}

function showEdited() {
  find(document, "edited").hidden = !run || sameStudy(form.study, run.study);
}

async function importStudy(file) {
  let study;
  try {
    study = JSON.parse(await file.text());
  } catch {
    toast(`${file.name} is not a JSON file.`, { fault: true });
    return;
  }
  const full = { ...structuredClone(data.defaults), ...study };
  try {
    form.load({ ...full, experiment: { ...data.defaults.experiment, ...full.experiment } });
    showEdited();
  } catch {
    form.load(data.defaults);
    toast(`${file.name} is not a study: export one here to see its shape.`, { fault: true });
  }
}

function setUpStudyFile() {
  const menu = document.querySelector(".menu");
  const file = find(document, "import-file");
  find(document, "export").addEventListener("click", () => {
    saveText(`${JSON.stringify(form.study, null, 2)}\n`, "study.json", "application/json");
    menu.open = false;
  });
  find(document, "import").addEventListener("click", () => file.click());
  file.addEventListener("change", () => {
    if (file.files.length) importStudy(file.files[0]);
    file.value = "";
    menu.open = false;
  });
  find(document, "defaults").addEventListener("click", () => {
    form.load(data.defaults);
    showEdited();
    menu.open = false;
  });
  menu.addEventListener("keydown", (event) => {
    if (event.key === "Escape") {
      menu.open = false;
      menu.querySelector("summary").focus();
    }
  });
}

function openAddress() {
  const id = identityIn(location.pathname);
  if (id) openRun(id);
  else show(null);
}

form.root.addEventListener("submit", (event) => {
  event.preventDefault();
  start();
});
form.changed = showEdited;
addEventListener("keydown", (event) => {
  if (event.key === "Enter" && (event.ctrlKey || event.metaKey)) start();
});
addEventListener("popstate", () => {
  const id = identityIn(location.pathname);
  if ((id ?? null) !== (run?.id ?? null)) openAddress();
});
// A browser allows few connections to one host: a page that nobody looks at gives its own back.
document.addEventListener("visibilitychange", () => {
  if (document.hidden) feed?.close();
  else feed?.open();
});
addEventListener("pagehide", () => feed?.close());
addEventListener("pageshow", (event) => {
  if (event.persisted) feed?.open();
});
setUpStudyFile();
openAddress();
openPage().then((mayWrite) => {
  runButton.disabled = !mayWrite;
  // Parsing the plotting library takes a while: better before Run is pressed than after.
  (window.requestIdleCallback ?? setTimeout)(() => plotly());
});
