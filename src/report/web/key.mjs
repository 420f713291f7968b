// The access key, where the service asks for one: entered by hand, kept for this tab alone, sent with every call.

import { announce, byId, el, fill } from "./dom.mjs";

const NAME = "access-key";

/** Where the browser keeps nothing, the key lasts until the page is left. */
let inMemory = null;
/** The question that is open, as a promise of whether a key was given. */
let asking = null;

/** The key that is kept, or nothing. */
export function accessKey() {
  try {
    return sessionStorage.getItem(NAME);
  } catch {
    return inMemory;
  }
}

/** The headers that send the key. */
export function keyHeaders() {
  const key = accessKey();
  return key ? { Authorization: `Bearer ${key}` } : {};
}

/** Asks for a key, once for however many calls need it; answers whether one was given. `why` is the service's own word. */
export function askForKey(why) {
  asking ??= ask(why).finally(() => {
    asking = null;
  });
  return asking;
}

/** Forgets the key, and what the page shows by it. */
export function forgetKey() {
  keepKey(null);
  announce("The access key is forgotten.");
  location.reload();
}

/** Shows that a key is in use, and how to forget it. */
export function showKey() {
  const forget = el("button", { type: "button", onclick: forgetKey }, "Forget the access key");
  fill(byId("key"), accessKey() && forget);
}

function ask(why) {
  return new Promise((resolve) => {
    const before = document.activeElement;
    const input = el("input", {
      id: "access-key",
      type: "password",
      autocomplete: "off",
      spellcheck: "false",
      required: true,
      "aria-describedby": "access-key-why access-key-help",
    });
    const end = (given) => {
      dialog.close();
      dialog.remove();
      before?.focus?.();
      resolve(given);
    };
    const submit = (event) => {
      event.preventDefault();
      keepKey(input.value.trim());
      showKey();
      end(true);
    };
    const form = el(
      "form",
      { onsubmit: submit },
      el("h2", { id: "access-key-title" }, "This service asks for an access key"),
      el("p", { id: "access-key-why" }, why),
      el("p", {}, el("label", { for: "access-key" }, "Access key"), input),
      el("p", { id: "access-key-help", class: "help" }, "It begins with tailcast_ and comes from whoever runs this service. It is kept for this tab alone, until you close it or forget it here."),
      el(
        "p",
        { class: "actions" },
        el("button", { type: "submit", class: "first" }, "Use this key"),
        el("button", { type: "button", onclick: () => end(false) }, "Not now"),
      ),
    );
    const dialog = el("dialog", { class: "key", "aria-labelledby": "access-key-title" }, form);
    // Escape.
    dialog.addEventListener("cancel", (event) => {
      event.preventDefault();
      end(false);
    });
    document.body.append(dialog);
    dialog.showModal();
    input.focus();
  });
}

function keepKey(key) {
  inMemory = key;
  try {
    if (key) sessionStorage.setItem(NAME, key);
    else sessionStorage.removeItem(NAME);
  } catch {
    // Switched off.
  }
}
