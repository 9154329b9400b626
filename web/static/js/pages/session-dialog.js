// The dialog that puts a run into a session, present or new.

import { api, pages } from "../model/links.js";
import { get, post, put } from "../model/requests.js";
import { find, make, say } from "./elements.js";
import { attempt, toast } from "./shell.js";

const NEW = "";

export async function addToSession(run) {
  const dialog = find(document, "session-dialog");
  const pick = find(dialog, "session-pick");
  const name = find(dialog, "session-name");
  const fault = find(dialog, "session-fault");
  const loaded = await attempt(async () => {
    const { sessions } = await get(api.sessions);
    pick.replaceChildren(
      ...sessions.map((session) => make("option", { value: session.id }, session.name)),
      make("option", { value: NEW }, "A new session…"),
    );
  });
  if (!loaded) return;
  const showNew = () => { find(dialog, "session-new").hidden = pick.value !== NEW; };
  pick.onchange = showNew;
  name.value = "";
  say(fault, "");
  showNew();
  find(dialog, "session-add").onclick = async (event) => {
    event.preventDefault();
    try {
      const session = await chosen(pick, name);
      await put(api.sessionRun(session.id, run));
      dialog.close();
      toast(`Added to ${session.name}.`, {
        label: "Open the session", act: () => location.assign(pages.session(session.id)),
      });
    } catch (refusal) {
      say(fault, refusal.message);
    }
  };
  dialog.showModal();
}

async function chosen(pick, name) {
  if (pick.value !== NEW) return { id: pick.value, name: pick.selectedOptions[0].textContent };
  const text = name.value.trim();
  if (!text) throw new Error("Give the new session a name.");
  return post(api.sessions, { name: text });
}
