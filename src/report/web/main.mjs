// Which view is shown; the part of the address after # says so.

import { startAsk } from "./ask.mjs";
import { announce, byId } from "./dom.mjs";
import { followWithKey } from "./http.mjs";
import { showKey } from "./key.mjs";
import { showNetwork } from "./network.mjs";
import { showNetworks } from "./networks.mjs";

/** Stops what the view before goes on with: streams and timers. */
let leave = () => {};

function route({ first = false } = {}) {
  leave();
  leave = () => {};
  const [view, name] = location.hash.slice(1).split("/").map(decoded);
  const shown = view === "networks" || (view === "network" && name) ? view : "ask";
  for (const one of ["ask", "networks", "network"]) byId(`view-${one}`).hidden = one !== shown;
  for (const [id, here] of [["to-ask", shown === "ask"], ["to-networks", shown !== "ask"]]) {
    if (here) byId(id).setAttribute("aria-current", "page");
    else byId(id).removeAttribute("aria-current");
  }
  if (shown === "networks") leave = showNetworks(byId("view-networks"));
  if (shown === "network") leave = showNetwork(byId("view-network"), name);
  document.title = { ask: "tailcast", networks: "Networks kept here · tailcast", network: `${name} · tailcast` }[shown];
  // A reader of the screen is led to the new view, but not on the first one.
  if (!first) byId("main").focus({ preventScroll: true });
  if (!first) scrollTo(0, 0);
}

function decoded(part) {
  try {
    return decodeURIComponent(part);
  } catch {
    return part;
  }
}

// The view stays as it is: its address is not that of its content.
document.querySelector(".skip").addEventListener("click", (event) => {
  event.preventDefault();
  byId("main").focus();
});

document.addEventListener("click", (event) => {
  followWithKey(event).catch((problem) => announce(`It could not be fetched: ${problem.detail}`));
});

showKey();
startAsk();
addEventListener("hashchange", () => route());
route({ first: true });
