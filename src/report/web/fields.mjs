// The form of a forecast: what stands in it, and what is kept of it over a reload.

import { byId, keep, kept } from "./dom.mjs";
import { today, yearAfter } from "./defaults.mjs";
import { LIMIT, SCENARIO, rowsIn } from "./questions.mjs";

const IDS = { arrivals: "arrivals", asOf: "as-of", kind: "kind", growth: "growth", links: "links", thresholds: "thresholds", until: "until", every: "every" };

/** Longest text of counts that is kept over a reload, characters. */
const MOST_KEPT = 2_000_000;

/** The form: `read()`, `write(entered)`, `save(evidence)`, `restore()`; `onChange` is told of every change. */
export function formOf(onChange) {
  const limits = rowsIn(byId("limits"), {
    kind: LIMIT,
    noun: "limit",
    collection: "limits",
    fresh: () => ({ by: byId("until").value, risk: "5", threshold: firstNumber(byId("thresholds")) }),
    onChange,
  });
  const scenarios = rowsIn(byId("scenarios"), { kind: SCENARIO, noun: "what-if", collection: "scenarios", fresh: () => ({}), onChange });
  const read = () => {
    const entered = { limits: limits.get(), scenarios: scenarios.get() };
    for (const [key, id] of Object.entries(IDS)) entered[key] = byId(id).value.trim();
    return entered;
  };
  const write = (entered) => {
    for (const [key, id] of Object.entries(IDS)) if (entered[key] !== undefined) byId(id).value = entered[key];
    if (entered.limits) limits.set(entered.limits);
    if (entered.scenarios) scenarios.set(entered.scenarios);
  };
  byId("ask").addEventListener("input", onChange);
  // The horizon goes with the day of the counts until somebody sets it.
  byId("as-of").addEventListener("change", () => {
    const [from, until] = [byId("as-of").value, byId("until")];
    if (from && (until.value === "" || until.value === until.dataset.proposed)) propose(from);
  });
  return { read, write, save, restore: () => kept("tailcast.ask"), fresh };

  function save(evidence) {
    const long = evidence && evidence.counts.length * 12 + JSON.stringify(evidence.base ?? {}).length > MOST_KEPT;
    keep("tailcast.ask", { entered: read(), evidence: long ? null : evidence });
  }

  function fresh() {
    write({ arrivals: "", asOf: today(), kind: "received", growth: "", links: "", thresholds: "", every: "P1M", limits: [], scenarios: [] });
    propose(today());
  }
}

/** Puts the proposed end of the horizon into its field. */
export function propose(asOf) {
  const until = byId("until");
  until.value = yearAfter(asOf);
  until.dataset.proposed = until.value;
}

function firstNumber(field) {
  const all = field.value.match(/\d+/g) ?? field.placeholder.match(/\d+/g) ?? [];
  return all[all.length - 1] ?? "";
}
