// The networks kept by the service, each with its limits' state in words.

import { el, fill } from "./dom.mjs";
import { call } from "./http.mjs";
import { showProblem } from "./problem.mjs";
import { count, day, sentence } from "./words.mjs";

/** Networks on one page of the list: each takes a call for its limits. */
const PAGE = 20;
/** While a forecast is being made anew, the list is read again after so long, milliseconds. */
const AGAIN = 3000;

const STATES = {
  current: "The forecast stands on all that is stored.",
  refreshing: "The forecast is being made anew.",
  outdated: "The forecast is older than what is stored",
};

/** How a network's forecast stands to what is stored, in words. */
export function refreshInWords(refresh) {
  if (!refresh) return "No forecast yet: it needs a plan and at least one snapshot.";
  return sentence(STATES[refresh.state] + (refresh.reason ? `: ${refresh.reason}` : ""));
}

/** Shows the list; answers how to stop reading it. */
export function showNetworks(box) {
  let timer;
  let gone = false;
  const list = el("div", {});
  fill(box, el("h1", {}, "Networks kept here"), list);
  const read = async (path) => {
    try {
      const { data, headers } = await call(path);
      if (gone) return;
      fill(list, data.items.length === 0 ? howTo() : el("div", { class: "cards" }, data.items.map(card)), turn(headers, read));
      if (data.items.some((network) => network.refresh?.state === "refreshing")) timer = setTimeout(() => read(path), AGAIN);
    } catch (problem) {
      if (!gone) showProblem(list, problem, { retry: () => read(path) });
    }
  };
  read(`/v1/networks?limit=${PAGE}`);
  return () => {
    gone = true;
    clearTimeout(timer);
  };
}

// The next page's address comes from the Link header (RFC 8288) and is on this service.
function turn(headers, read) {
  const next = /<([^>]+)>;\s*rel="next"/.exec(headers.get("Link") ?? "");
  return next && el("p", {}, el("button", { type: "button", onclick: () => read(next[1]) }, "Further networks"));
}

function card(network) {
  const limits = el("div", {}, el("p", { class: "help" }, "Reading its limits…"));
  readLimits(limits, network.name);
  return el(
    "article",
    { class: "card" },
    el("h2", {}, el("a", { href: `#network/${encodeURIComponent(network.name)}` }, network.name)),
    network.description && el("p", {}, network.description),
    el("p", { class: "help" }, evidenceInWords(network)),
    el("p", {}, refreshInWords(network.refresh)),
    limits,
  );
}

/** What is stored of a network. */
export function evidenceInWords(network) {
  const snapshots = network.snapshots === 1 ? "1 snapshot" : `${count(network.snapshots)} snapshots`;
  const newest = network.newest_snapshot ? `, the newest of ${day(network.newest_snapshot)}` : "";
  const links = network.link_events ? "; every landing link counted" : "";
  return `${snapshots}${newest}${links}.`;
}

async function readLimits(box, name) {
  try {
    const { data } = await call(`/v1/networks/${encodeURIComponent(name)}/limits`);
    if (data.items.length === 0) fill(box, el("p", { class: "help" }, "No limits are kept with it."));
    else fill(box, el("ul", {}, data.items.map((limit) => el("li", {}, limitInWords(limit)))));
  } catch (problem) {
    fill(box, el("p", { class: "help" }, `Its limits cannot be read: ${problem.detail}`));
  }
}

/** A kept limit's state: its answer, or why there is none, and whether that is up to date. */
export function limitInWords(limit) {
  const name = el("b", {}, limit.name);
  // The words of the service name the address to ask again; this page asks again by itself.
  const state = limit.state === "refreshing" ? "Its answer is being made anew." : sentence(limit.detail);
  if (!limit.verdict) return [name, ": ", state];
  const verdict = sentence(limit.verdict.replace(`${limit.name}: `, ""));
  return [name, ": ", verdict, limit.state === "current" ? "" : ` ${state}`];
}

function howTo() {
  return el(
    "div",
    { class: "welcome" },
    el("p", {}, "No network is kept here yet. A network that is kept gets its forecast anew whenever counts come in, and each forecast is held against what came."),
    el("p", {}, "From a shell, with counts in counts.csv:"),
    el(
      "pre",
      { tabindex: "0", "aria-label": "Commands that keep a network" },
      `n=${location.origin}/v1/networks/heronsgate
curl -X PUT $n -H 'Content-Type: application/json' -d '{"degree_kind": "received",
  "forecast_plan": {"thresholds": [10, 50], "arrivals": {"per_day": 40},
  "horizon": {"ends_after": "P1Y", "every": "P1M"}}}'
curl -X PUT $n/snapshots/2026-08-01 -H 'Content-Type: text/csv' --data-binary @counts.csv`,
    ),
  );
}
