// What every page has: theme, power unit, access, toasts, copying a link.

import { api } from "../model/links.js";
import { get } from "../model/requests.js";
import "../plots/theme.js";
import { find, findAll, make } from "./elements.js";

const TOAST_MS = 8000;

/** A choice remembered in this browser; works for the visit alone where storage is refused. */
function remembered(key, allowed) {
  const name = `crossdip.${key}`;
  let value = allowed[0];
  try {
    const stored = localStorage.getItem(name);
    if (allowed.includes(stored)) value = stored;
  } catch {
    // Storage is refused: the first choice stands.
  }
  return {
    get: () => value,
    set(next) {
      value = next;
      try {
        localStorage.setItem(name, next);
      } catch {
        // Storage is refused: the choice lasts as long as the page.
      }
    },
  };
}

const themeChoice = remembered("theme", ["auto", "light", "dark"]);
const unitChoice = remembered("power-unit", ["mW", "dBm"]);

class PowerUnit extends EventTarget {
  get value() {
    return unitChoice.get();
  }

  set value(unit) {
    unitChoice.set(unit);
    this.dispatchEvent(new Event("change"));
  }

  /** Let a pair of radio buttons show and set the unit. */
  attach(fieldset) {
    for (const radio of fieldset.querySelectorAll("input")) {
      radio.checked = radio.value === this.value;
      radio.addEventListener("change", () => { this.value = radio.value; });
    }
  }
}

export const powerUnit = new PowerUnit();

/** Set up the frame; resolves to whether this browser may change things. */
export async function openPage() {
  const select = find(document, "theme-choice");
  select.value = themeChoice.get();
  select.addEventListener("change", () => {
    themeChoice.set(select.value);
    document.documentElement.dataset.theme = select.value;
  });
  let mayWrite = true;
  try {
    mayWrite = (await get(api.access)).may === "write";
  } catch {
    // Without an answer the server itself refuses what is not allowed.
  }
  find(document, "look-only").hidden = mayWrite;
  document.body.classList.toggle("may-only-look", !mayWrite);
  for (const button of findAll(document, "needs-write")) button.disabled = !mayWrite;
  for (const title of findAll(document, "run-title")) title.readOnly = !mayWrite;
  return mayWrite;
}

/** A short message, with one thing that may be done about it. */
export function toast(text, { label, act, lasting = TOAST_MS, fault = false } = {}) {
  const close = () => box.remove();
  const box = make("div", { class: fault ? "toast toast-fault" : "toast" }, make("span", {}, text));
  if (label) {
    box.append(make("button", { type: "button", onclick: () => { close(); act(); } }, label));
  }
  box.append(make("button", { type: "button", class: "plain", "aria-label": "Dismiss", onclick: close }, "×"));
  find(document, "toasts").append(box);
  setTimeout(close, lasting);
}

/** Do something that asks the server; its refusal becomes a toast. Resolves to false then. */
export async function attempt(work) {
  try {
    await work();
    return true;
  } catch (refusal) {
    toast(refusal.message, { fault: true });
    return false;
  }
}

/** Copy this page's link. The clipboard needs a secure context, which a lab's plain HTTP is not. */
export async function copyLink() {
  const link = location.href;
  try {
    await navigator.clipboard.writeText(link);
  } catch {
    const area = make("textarea", { class: "unseen", "aria-hidden": "true" });
    area.value = link;
    document.body.append(area);
    area.select();
    const copied = document.execCommand("copy");
    area.remove();
    if (!copied) {
      toast(`Copy this link: ${link}`, { lasting: 30_000 });
      return;
    }
  }
  toast("Link copied.");
}
