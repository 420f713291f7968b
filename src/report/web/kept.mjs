// Limits and what-ifs kept with a network: read, added, taken away, compared.

import { announce, el, fill, freshId, readable } from "./dom.mjs";
import { call } from "./http.mjs";
import { limitInWords } from "./networks.mjs";
import { clearProblem, fieldFinder, showProblem } from "./problem.mjs";
import { LIMIT, SCENARIO, changeInWords, limitBody, rowFields, rowValues, scenarioBody } from "./questions.mjs";
import { scenarioTable } from "./tables.mjs";
import { pickShown } from "./defaults.mjs";
import { percent, sentence } from "./words.mjs";

/** The limits of a network; `onChange` is told when one is stored or taken away. */
export function showLimits(box, network, onChange) {
  return showKept(box, {
    path: `${network}/limits`,
    kind: LIMIT,
    noun: "limit",
    body: limitBody,
    words: limitInWords,
    none: "None yet. A limit says how many hubs there is room for; each forecast then says when that is passed.",
    onChange,
  });
}

/** The what-ifs of a network, set beside the forecast as it stands. */
export function showScenarios(box, network, onChange) {
  const list = el("div", {});
  const beside = el("div", {});
  fill(box, list, beside);
  const read = showKept(list, {
    path: `${network}/scenarios`,
    kind: SCENARIO,
    noun: "what-if",
    body: scenarioBody,
    words: ({ name, change }) => [el("b", {}, name), `: ${changeInWords(change)}`],
    none: "None yet. A what-if says what would be different: more arrivals, a cap on links, another mix.",
    onChange,
    onRead: (items) => (items.length > 0 ? compare(beside, network) : fill(beside)),
  });
  return read;
}

function showKept(box, spec) {
  const list = el("ul", { class: "kept" });
  const problem = el("div", {});
  const row = el("div", { class: "row" }, rowFields(spec.kind));
  const form = el("form", { class: "rows", novalidate: true, onsubmit: (event) => store(event) }, row, el("button", { type: "submit" }, `Keep this ${spec.noun}`));
  const title = el("summary", {}, `Add a ${spec.noun}`);
  fill(box, list, el("details", {}, title, form, problem));

  async function read() {
    try {
      const { data } = await call(spec.path);
      fill(list, data.items.length === 0 ? el("li", { class: "help" }, spec.none) : data.items.map(line));
      spec.onRead?.(data.items);
    } catch (error) {
      fill(list, el("li", { class: "help" }, error.message));
    }
  }

  function line(item) {
    const drop = el("button", { type: "button", "aria-label": `Take away ${spec.noun} ${item.name}`, onclick: () => remove(item.name) }, "Take away");
    return el("li", {}, el("span", {}, spec.words(item)), " ", drop);
  }

  async function store(event) {
    event.preventDefault();
    if (!readable(event.currentTarget)) return;
    clearProblem(problem, form);
    const values = rowValues(row);
    const { name, ...body } = spec.body(values);
    if (!name) {
      showFault("/name", `Give the ${spec.noun} a name.`);
      return;
    }
    try {
      await call(`${spec.path}/${encodeURIComponent(name)}`, { method: "PUT", body: JSON.stringify(body) });
      announce(`The ${spec.noun} ${name} is kept.`);
      fill(row, rowFields(spec.kind));
      title.focus();
      await read();
      spec.onChange();
    } catch (error) {
      showProblem(problem, error, { fieldOf: fieldFinder(form) });
    }
  }

  function showFault(pointer, detail) {
    showProblem(problem, { status: 400, title: "", detail: "Nothing was sent yet.", faults: [{ pointer, detail }] }, { fieldOf: fieldFinder(form) });
  }

  async function remove(name) {
    try {
      await call(`${spec.path}/${encodeURIComponent(name)}`, { method: "DELETE" });
      announce(`The ${spec.noun} ${name} is gone.`);
      title.focus();
      await read();
      spec.onChange();
    } catch (error) {
      showProblem(problem, error);
    }
  }

  read();
  return read;
}

async function compare(box, network) {
  fill(box, el("p", { class: "help" }, "Comparing…"));
  try {
    const { data } = await call(`${network}/comparison`);
    const tail = data.forecast[0].tail;
    const shown = pickShown(tail.map((one) => one.threshold), (threshold) => tail.find((one) => one.threshold === threshold).now);
    const id = freshId("beside");
    fill(
      box,
      el("h3", { id }, "Beside the forecast as it stands"),
      el("ul", {}, data.scenarios.map((one) => el("li", {}, el("b", {}, one.name), ": ", sentence(one.verdict.replace(`${one.name}: `, "")), limitsUnder(one)))),
      tail.map((one) => one.threshold).sort((a, b) => (b === shown) - (a === shown)).map((threshold, i) =>
        i === 0 ? scenarioTable(data.scenarios, threshold) : el("details", {}, el("summary", {}, `With at least ${threshold} links`), scenarioTable(data.scenarios, threshold)),
      ),
      el("p", {}, el("a", { href: `${network}/comparison?format=csv`, download: "tailcast-comparison.csv" }, "Comparison as CSV")),
    );
  } catch (problem) {
    fill(box, el("p", { class: "help" }, problem.message));
  }
}

function limitsUnder(scenario) {
  if (scenario.limits.length === 0) return "";
  const words = scenario.limits.map((limit) => `${limit.name} is passed by ${limit.by.slice(0, 10)} with probability ${percent(limit.at_by.crossed)}`);
  return ` Under it ${words.join("; ")}.`;
}
