// The list of sessions: create, open, delete with a way back.

import { api, pages } from "../model/links.js";
import { get, post, remove } from "../model/requests.js";
import { dateText, find, make, say } from "./elements.js";
import { attempt, openPage, toast } from "./shell.js";

const part = (name) => find(document, name);

let mayWrite = true;

async function load() {
  try {
    const { sessions } = await get(api.sessions);
    part("sessions").replaceChildren(...sessions.map(entry));
    part("nothing").hidden = sessions.length > 0;
    say(part("fault"), "");
  } catch (refusal) {
    say(part("fault"), refusal.message);
  }
}

function entry(session) {
  const count = session.runs === 1 ? "1 run" : `${session.runs} runs`;
  return make("li", { class: "session" },
    make("a", { href: pages.session(session.id) }, session.name),
    make("span", { class: "note" }, `${count}, changed ${dateText(session.updated)}`),
    mayWrite
      ? make("button", {
        type: "button", "aria-label": `Delete ${session.name}`, onclick: () => discard(session),
      }, "Delete")
      : null,
  );
}

async function discard(session) {
  await attempt(async () => {
    await remove(api.session(session.id));
    await load();
    toast(`Deleted “${session.name}”.`, {
      label: "Undo",
      act: () => attempt(async () => {
        await post(api.restoreSession(session.id));
        await load();
      }),
    });
  });
}

part("new-session").addEventListener("submit", async (event) => {
  event.preventDefault();
  const name = part("name").value.trim();
  if (!name) {
    say(part("fault"), "Give the new session a name.");
    return;
  }
  try {
    const session = await post(api.sessions, { name });
    location.assign(pages.session(session.id));
  } catch (refusal) {
    say(part("fault"), refusal.message);
  }
});
mayWrite = await openPage();
await load();
