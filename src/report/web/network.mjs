// One network that is kept: what will come of it by its plan, its limits and what-ifs, how its forecasts have done.

import { showAnswer } from "./answer.mjs";
import { announce, el, fill, freshId, readable } from "./dom.mjs";
import { call, idempotencyKey, patiently } from "./http.mjs";
import { watchJobs } from "./jobs.mjs";
import { showLimits, showScenarios } from "./kept.mjs";
import { clearProblem, fieldFinder, showProblem } from "./problem.mjs";
import { readThresholds } from "./request.mjs";
import { sentence } from "./words.mjs";

const FORECAST_STATES = {
  current: "It stands on all that is stored.",
  refreshing: "It is being made anew.",
  outdated: "It is older than what is stored; the work below says why.",
};
/** Time between two looks while a forecast is being made and no work is seen, milliseconds. */
const AGAIN = 2000;

/** Shows a network; answers how to stop following it. */
export function showNetwork(box, name) {
  const path = `/v1/networks/${encodeURIComponent(name)}`;
  const view = { gone: false, name, path, stop: () => {}, timer: null };
  const part = (title, ...children) => {
    const id = freshId("network");
    return el("section", { class: "part", "aria-labelledby": id }, el("h2", { id }, title), children);
  };
  const made = (className) => el("div", { class: className });
  view.about = made("");
  view.latest = el("section", { class: "answer", tabindex: "-1", "aria-label": "The latest forecast" });
  [view.state, view.limits, view.scenarios, view.accuracy, view.jobs, view.other] = ["", "", "", "", "", "other"].map(made);
  fill(
    box,
    el("p", {}, el("a", { href: "#networks" }, "All networks kept here")),
    el("h1", {}, name),
    view.about,
    view.state,
    view.latest,
    part("Limits kept with it", view.limits),
    part("What if", view.scenarios),
    part("Ask something else of it", view.other),
    part("How its forecasts have done", view.accuracy),
    part("Work under way", view.jobs),
  );
  open(view);
  return () => {
    view.gone = true;
    view.stop();
    clearTimeout(view.timer);
  };
}

async function open(view) {
  try {
    const { data } = await call(view.path);
    const kind = data.degree_kind === "total" ? "A degree counts links at both ends." : "A degree counts links received.";
    fill(view.about, el("p", {}, data.description ? `${sentence(data.description)} ` : "", kind));
    otherQuestion(view, data.forecast_plan);
  } catch (problem) {
    showProblem(view.about, problem, { retry: () => open(view) });
    return;
  }
  const again = () => follow(view);
  view.readLimits = showLimits(view.limits, view.path, again);
  view.readScenarios = showScenarios(view.scenarios, view.path, again);
  await Promise.all([readLatest(view), readAccuracy(view), readJobs(view)]);
}

// After a change: what is at work now, and later what came of it.
async function follow(view) {
  if (view.gone) return;
  await Promise.all([readLatest(view), readJobs(view)]);
}

async function readLatest(view) {
  try {
    const { data, headers } = await call(`${view.path}/forecasts/latest`);
    if (view.gone) return;
    const state = headers.get("Forecast-State") ?? "current";
    fill(view.state, el("p", { class: "help" }, FORECAST_STATES[state] ?? ""));
    if (view.shown !== data.id) {
      const request = { method: "GET", path: `${view.path}/forecasts/latest` };
      showAnswer(view.latest, data, request, { quiet: true, title: "What will come, by its plan" });
      if (view.shown) announce("There is a new forecast.");
      view.shown = data.id;
    }
  } catch (problem) {
    if (view.gone) return;
    if (problem.status === 404) fill(view.state, el("p", {}, sentence(problem.detail)));
    else showProblem(view.state, problem, { retry: () => readLatest(view) });
  }
}

async function readAccuracy(view) {
  const replay = el("button", { type: "button", onclick: () => replayPast(view) }, "Replay forecasts of the past");
  const said = el("div", {});
  fill(view.accuracy, said, el("p", { class: "actions" }, replay, el("span", { class: "help" }, "What would have been forecast from each snapshot, against what came.")), (view.replayed = el("div", {})));
  try {
    const { data } = await call(`${view.path}/accuracy`);
    fill(
      said,
      el("p", {}, data.verdict),
      data.warnings.length > 0 && el("ul", { class: "warnings" }, data.warnings.map((warning) => el("li", {}, sentence(warning.detail)))),
      data.forecasts.length > 0 && el("p", {}, el("a", { href: `${view.path}/accuracy?format=csv`, download: "tailcast-accuracy.csv" }, "Each forecast beside what came, as CSV")),
    );
  } catch (problem) {
    fill(said, el("p", { class: "help" }, problem.message));
  }
  readReplays(view);
}

async function readReplays(view) {
  try {
    const { data } = await call(`${view.path}/backtests?limit=1`);
    if (data.items.length === 0) return;
    const run = await call(`/v1/backtests/${encodeURIComponent(data.items[0].id)}`);
    const old = data.items[0].outdated ? " It stands on counts that have changed since." : "";
    fill(view.replayed, el("p", {}, run.data.verdict + old));
  } catch (problem) {
    fill(view.replayed, el("p", { class: "help" }, problem.message));
  }
}

async function replayPast(view) {
  try {
    await call(`${view.path}/backtests`, { method: "POST", body: "{}", headers: { Prefer: "respond-async" } });
    announce("It is at work; its progress stands under Work under way.");
    await readJobs(view);
    readReplays(view);
  } catch (problem) {
    showProblem(view.replayed, problem, { retry: () => replayPast(view) });
  }
}

async function readJobs(view) {
  view.stop();
  clearTimeout(view.timer);
  try {
    const { data } = await call(`/v1/jobs?network=${encodeURIComponent(view.name)}&limit=20`);
    if (view.gone) return;
    view.stop = watchJobs(view.jobs, data.items, (job) => ended(view, job));
    const state = view.state.textContent;
    if (state.includes("made anew") && !data.items.some((job) => job.state === "running" || job.state === "waiting")) {
      view.timer = setTimeout(() => follow(view), AGAIN);
    }
  } catch (problem) {
    fill(view.jobs, el("p", { class: "help" }, problem.message));
  }
}

function ended(view, job) {
  if (view.gone) return;
  if (job.kind === "backtest") readReplays(view);
  else {
    view.readLimits();
    view.readScenarios();
    readAccuracy(view);
  }
  follow(view);
}

// A forecast with other thresholds, dates or arrivals than the plan's; it is kept as a run and changes nothing else.
function otherQuestion(view, plan) {
  const field = (label, pointer, attributes, input = "input", ...children) => {
    const id = freshId("other");
    return el("p", {}, el("label", { for: id }, label), el(input, { id, "data-pointer": pointer, autocomplete: "off", ...attributes }, children));
  };
  const steps = [["P1W", "a week"], ["P1M", "a month"], ["P3M", "a quarter"], ["P1Y", "a year"]];
  const thresholds = field("A hub has at least … links", "/thresholds", { type: "text", placeholder: plan?.thresholds.join(", ") ?? "10, 100" });
  const until = field("Look ahead until", "/horizon/until", { type: "date" });
  const every = field("in steps of", "/horizon/every", {}, "select", steps.map(([value, words]) => el("option", { value, selected: value === "P1M" }, words)));
  const arrivals = field("New nodes a day", "/arrivals/per_day", { type: "number", min: "0", step: "any", placeholder: plan?.arrivals ? "as planned" : "read off the snapshots" });
  const problem = el("div", {});
  const answer = el("section", { class: "answer", tabindex: "-1", "aria-label": "The other answer" });
  const value = (one) => one.lastElementChild.value.trim();
  const form = el(
    "form",
    { novalidate: true, onsubmit: (event) => ask(event) },
    el("div", { class: "fields" }, thresholds, until, every, arrivals),
    el("p", { class: "help" }, "What is left empty is as the plan says."),
    el("button", { type: "submit" }, "Ask"),
  );
  fill(view.other, form, problem, answer);

  async function ask(event) {
    event.preventDefault();
    if (!readable(event.currentTarget)) return;
    clearProblem(problem, form);
    const asked = readThresholds(value(thresholds));
    const fieldOf = fieldFinder(form);
    if (asked.fault) {
      showProblem(problem, { status: 400, detail: "Nothing was sent yet.", faults: [{ pointer: "/thresholds", detail: asked.fault }] }, { fieldOf });
      return;
    }
    const body = {};
    if (asked.thresholds.length > 0) body.thresholds = asked.thresholds;
    if (value(until)) body.horizon = { until: value(until), every: value(every) };
    if (value(arrivals)) body.arrivals = { per_day: Number(value(arrivals)) };
    const request = { method: "POST", path: `${view.path}/forecasts`, body: JSON.stringify(body) };
    try {
      announce("Working it out…");
      const options = { method: "POST", body: request.body, headers: { "Idempotency-Key": idempotencyKey() } };
      const { data } = await patiently(request.path, options, (wait) => announce(`The service is busy; asking again in ${wait} s.`));
      showAnswer(answer, data, request, { title: "What would come" });
    } catch (error) {
      showProblem(problem, error, { fieldOf, retry: () => form.requestSubmit() });
    }
  }
}
