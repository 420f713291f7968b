// A forecast as tables.

import { el, freshId } from "./dom.mjs";
import { count, day, percent, range, sentence, tailAt } from "./words.mjs";

/** A table that a narrow screen scrolls by itself; `head` are the column titles, each row starts with its own title. */
export function table(caption, head, rows, { current = () => false } = {}) {
  const id = freshId("caption");
  return el(
    "div",
    { class: "table", tabindex: "0", role: "region", "aria-labelledby": id },
    el(
      "table",
      {},
      el("caption", { id }, caption),
      el("thead", {}, el("tr", {}, head.map((title) => el("th", { scope: "col" }, title)))),
      el(
        "tbody",
        {},
        rows.map((row, i) =>
          el(
            "tr",
            { class: current(i) ? "current" : null },
            el("th", { scope: "row" }, row[0]),
            row.slice(1).map((cell) => el("td", {}, cell)),
          ),
        ),
      ),
    ),
  );
}

/** Every threshold at one date. */
export function thresholdTable(date, shown) {
  const levels = date.nodes.intervals.map((interval) => interval.level);
  const head = ["Links at least", "Now", "Median", ...levels.map((level) => `${percent(level)} between`)];
  const rows = date.tail.map((tail) => [count(tail.threshold), count(tail.now), count(tail.median), ...tail.intervals.map(range)]);
  rows.push(["all nodes", count(date.nodes.now), count(date.nodes.median), ...date.nodes.intervals.map(range)]);
  const largest = date.largest_degree;
  rows.push(["largest degree", count(largest.now), count(largest.median), ...largest.intervals.map(range)]);
  return table(`Nodes by ${day(date.date)}`, head, rows, { current: (i) => date.tail[i]?.threshold === shown });
}

/** One threshold at every date. */
export function dateTable(forecast, threshold) {
  const levels = forecast[0].nodes.intervals.map((interval) => interval.level);
  const head = ["Date", "Median", ...levels.map((level) => `${percent(level)} between`)];
  const rows = forecast.map((date) => {
    const tail = tailAt(date, threshold);
    return [day(date.date, true), count(tail.median), ...tail.intervals.map(range)];
  });
  return table(`Nodes with at least ${count(threshold)} links, date by date`, head, rows);
}

/** What-ifs beside the forecast as it stands, for one threshold at the last date. */
export function scenarioTable(scenarios, threshold) {
  const first = scenarios[0].dates[scenarios[0].dates.length - 1];
  const level = first.tail[0]?.difference.intervals.at(-1)?.level;
  const head = ["What if", "Nodes", "Difference", level === undefined ? "" : `${percent(level)} between`].filter((title) => title !== "");
  const at = (scenario) => tailAt(scenario.dates[scenario.dates.length - 1], threshold);
  const rows = scenarios.map((scenario) => {
    const tail = at(scenario);
    const interval = tail.difference.intervals.at(-1);
    return [scenario.name, count(tail.scenario), signed(tail.difference.expected), ...(interval ? [`${signed(interval.low)} to ${signed(interval.high)}`] : [])];
  });
  rows.unshift(["as it stands", count(at(scenarios[0]).standing), ...head.slice(2).map(() => "–")]);
  return table(`Nodes with at least ${count(threshold)} links expected by ${day(first.date)}`, head, rows);
}

function signed(value) {
  const text = count(Math.abs(value));
  if (text === "0") return "0";
  return value < 0 ? `−${text}` : `+${text}`;
}

/** How a limit fares, in a word for the eye and in words. */
export function limitCard(limit) {
  const crossed = limit.at_by.crossed;
  const [state, word] = limit.headroom < 0
    ? ["passed", "Passed already"]
    : crossed > limit.risk ? ["risky", "More risk than you put up with"] : ["kept", "Within the risk you put up with"];
  const facts = [
    ["Room left now", count(limit.headroom)],
    [`Passed by ${day(limit.by, true)}`, percent(crossed)],
    ["Risk put up with", percent(limit.risk)],
    ["Risk reached", limit.risk_reached.date ? day(limit.risk_reached.date.slice(0, 10), true) : "not by the last date"],
  ];
  const name = limit.name ?? `At most ${count(limit.max_nodes)} with ${count(limit.threshold)} links`;
  return el(
    "article",
    { class: `limit ${state}` },
    el("h4", {}, name),
    el("p", { class: "state" }, word),
    el("p", {}, sentence(limit.verdict.replace(`${limit.name}: `, ""))),
    el("dl", {}, facts.map(([title, value]) => el("div", {}, el("dt", {}, title), el("dd", {}, value)))),
    el("p", { class: "help" }, sentence(limit.arrivals.detail)),
  );
}
