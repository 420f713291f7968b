// From what was entered to the body of a request, and back from a pasted one. Pure.

import { limitBody, limitRow, scenarioBody, scenarioRow } from "./questions.mjs";

const STEPS = ["P1W", "P1M", "P3M", "P1Y"];

/** Thresholds as they were typed, or what is wrong with them: `{thresholds}` or `{fault}`. */
export function readThresholds(text) {
  if (/\d[,\s]\d{3}(?!\d)/.test(text)) {
    return { fault: `“${text}” can be read in two ways; put a comma and a space between thresholds, and nothing into a number.` };
  }
  const parts = text.split(/[\s,;]+/).filter((part) => part !== "");
  const wrong = parts.find((part) => !/^\d+$/.test(part));
  if (wrong !== undefined) return { fault: `“${wrong}” is not a whole number; write thresholds like 10, 100, 1000.` };
  return { thresholds: [...new Set(parts.map(Number))].sort((a, b) => a - b) };
}

/**
 * The body of a forecast, and faults that are found before it is sent. `entered` is the form, `evidence` the counts and
 * what else a pasted request has, `thresholds` those to ask about where none are entered.
 */
export function forecastBody(entered, { counts, base = {} }, thresholds) {
  const faults = [];
  const asked = readThresholds(entered.thresholds);
  if (asked.fault) faults.push({ pointer: "/thresholds", detail: asked.fault });
  const { snapshots = [], arrivals, horizon, dates, ...rest } = base;
  const body = {
    degree_kind: entered.kind,
    snapshots: [...snapshots, { as_of: entered.asOf, degree_counts: counts }],
    ...rest,
  };
  if (!entered.asOf) faults.push({ pointer: `/snapshots/${snapshots.length}/as_of`, detail: "Say on which day the counts were taken." });
  if (entered.arrivals !== "") {
    body.arrivals = { per_day: Number(entered.arrivals) };
    if (entered.growth !== "") body.arrivals.growth_per_year = Number((Number(entered.growth) / 100).toPrecision(12));
  } else if (arrivals !== undefined) body.arrivals = arrivals;
  else if (!knowsArrivals(base)) {
    faults.push({ pointer: "/arrivals/per_day", detail: "Say how many nodes arrive a day; counts alone cannot tell it." });
  }
  if (entered.links !== "") body.links_per_arrival = Number(entered.links);
  body.thresholds = asked.thresholds?.length > 0 ? asked.thresholds : thresholds;
  if (entered.until !== "") body.horizon = { until: entered.until, every: entered.every };
  else if (dates !== undefined) body.dates = dates;
  else if (horizon !== undefined) body.horizon = horizon;
  else body.horizon = { ends_after: "P1Y", every: entered.every };
  if (entered.limits.length > 0) body.limits = entered.limits.map(limitBody);
  if (entered.scenarios.length > 0) body.scenarios = entered.scenarios.map(scenarioBody);
  return { body, faults };
}

/** Whether a pasted request says, beside its newest counts, how fast nodes arrive. */
export function knowsArrivals(base = {}) {
  return [base.arrivals, base.snapshots, base.transitions, base.link_events].some((part) => part !== undefined);
}

/** What a pasted request puts into the form, what of it has no field, and the names of that. */
export function fromBody(request) {
  const { degree_kind, snapshots, arrivals, links_per_arrival, thresholds, horizon, dates, limits, scenarios, ...base } = request;
  const newest = snapshots[snapshots.length - 1];
  if (snapshots.length > 1) base.snapshots = snapshots.slice(0, -1);
  const plain = arrivals && Object.keys(arrivals).every((key) => key === "per_day" || key === "growth_per_year");
  if (arrivals && !plain) base.arrivals = arrivals;
  const simple = horizon?.until && STEPS.includes(horizon.every);
  if (horizon && !simple) base.horizon = horizon;
  if (dates) base.dates = dates;
  const entered = {
    kind: degree_kind === "total" ? "total" : "received",
    asOf: String(newest.as_of ?? "").slice(0, 10),
    arrivals: plain ? String(arrivals.per_day ?? "") : "",
    growth: plain && arrivals.growth_per_year !== undefined ? String(Number((100 * arrivals.growth_per_year).toPrecision(12))) : "",
    links: links_per_arrival === undefined ? "" : String(links_per_arrival),
    thresholds: Array.isArray(thresholds) ? thresholds.join(", ") : "",
    until: simple ? String(horizon.until).slice(0, 10) : "",
    every: simple ? horizon.every : "P1M",
    limits: Array.isArray(limits) ? limits.map(limitRow) : [],
    scenarios: Array.isArray(scenarios) ? scenarios.map(scenarioRow) : [],
  };
  return { entered, base, taken: Object.keys(base) };
}
