// A forecast on the screen: the finding first, then what it rests on, then how to take it along.

import { pickShown } from "./defaults.mjs";
import { chartFigure, chartPath } from "./chart.mjs";
import { announce, el, fill, freshId } from "./dom.mjs";
import { REQUEST_FILE, curlLine } from "./reproduce.mjs";
import { dateTable, limitCard, scenarioTable, thresholdTable } from "./tables.mjs";
import { count, finding, percent, sentence } from "./words.mjs";

/**
 * Shows a run; `request` is the call that made it, `{method, path, body}`. `quiet` neither
 * moves nor tells anything.
 */
export function showAnswer(box, run, request, { quiet = false, title = "What will come" } = {}) {
  const thresholds = run.forecast[0].tail.map((tail) => tail.threshold);
  const before = Number(box.dataset.threshold);
  const now = (threshold) => run.forecast[0].tail.find((tail) => tail.threshold === threshold).now;
  // Runs made by earlier versions do not tell the day of their counts.
  const asOf = run.history?.at(-1)?.as_of;
  let shown = thresholds.includes(before) ? before : pickShown(thresholds, now);
  const body = el("div", {});
  const render = () => {
    box.dataset.threshold = shown;
    fill(body, parts(run, shown));
    for (const link of box.querySelectorAll("[data-chart]")) link.href = chartPath(run, link.dataset.chart, shown);
  };
  const heading = el("h2", { class: "finding" });
  const choice = thresholdChoice(thresholds, shown, (threshold) => {
    shown = threshold;
    heading.textContent = finding(run, shown, asOf);
    render();
    announce(heading.textContent);
  });
  heading.textContent = finding(run, shown, asOf);
  fill(
    box,
    el("p", { class: "lead-in" }, title),
    heading,
    el("p", { class: "caution" }, ownPracticeFirst(run.cautions)),
    choice,
    body,
    takeAlong(run, request, shown),
  );
  render();
  if (!quiet) {
    announce(heading.textContent);
    const top = box.getBoundingClientRect().top;
    if (top < 0 || top > innerHeight * 0.7) box.scrollIntoView({ block: "start" });
  }
}

// The one that speaks of harm to people comes first, whatever its place in the answer.
function ownPracticeFirst(cautions) {
  return cautions.find((caution) => caution.includes("engineering practice")) ?? cautions[0] ?? "";
}

function thresholdChoice(thresholds, shown, choose) {
  if (thresholds.length < 2) return null;
  const name = freshId("shown");
  return el(
    "fieldset",
    { class: "choice" },
    el("legend", {}, "Look at hubs with at least"),
    thresholds.map((threshold) =>
      el(
        "label",
        {},
        el("input", { type: "radio", name, value: threshold, checked: threshold === shown, onchange: () => choose(threshold) }),
        el("span", {}, count(threshold)),
      ),
    ),
    el("span", { "aria-hidden": "true" }, "links"),
  );
}

function parts(run, shown) {
  const last = run.forecast[run.forecast.length - 1];
  return [
    chartFigure(run, "growth", shown),
    thresholdTable(last, shown),
    el("details", {}, el("summary", {}, "Date by date"), dateTable(run.forecast, shown)),
    run.limits.length > 0 && section("Your limits", el("div", { class: "limits" }, run.limits.map(limitCard))),
    run.scenarios.length > 0 && scenarios(run, shown),
    mix(run),
    doubts(run),
  ];
}

function section(title, ...children) {
  const id = freshId("part");
  return el("section", { class: "part", "aria-labelledby": id }, el("h3", { id }, title), children);
}

function scenarios(run, shown) {
  return section(
    "What if",
    el("ul", {}, run.scenarios.map((scenario) => el("li", {}, el("b", {}, scenario.name), ": ", sentence(scenario.verdict.replace(`${scenario.name}: `, ""))))),
    scenarioTable(run.scenarios, shown),
    chartFigure(run, "scenarios", shown),
  );
}

function mix(run) {
  const { fit } = run;
  const share = fit.preferential_share;
  const between = share.low !== null && share.low !== undefined ? ` (${percent(share.low)} to ${percent(share.high)} at ${percent(share.level)})` : "";
  const evidence = {
    given: "It was given, not read from the counts.",
    one_snapshot: "Read from one day's counts, as if the network had always grown this way; counts of an earlier day would tell more.",
    successive_snapshots: "Read from what changed between the days counted.",
    transitions: "Read from each node's degree before and after.",
    link_events: "Read from each landing link.",
  }[fit.evidence];
  const pool = run.pools[0]?.detail;
  return section(
    "What drives it",
    el("p", {}, fit.verdict),
    el("p", {}, `Share of links that follow degree: ${percent(share.estimate)}${between}. ${evidence ?? ""}`),
    pool && el("p", { class: "help" }, sentence(pool)),
    chartFigure(run, "tail"),
  );
}

function doubts(run) {
  const first = ownPracticeFirst(run.cautions);
  const others = run.cautions.filter((caution) => caution !== first);
  return section(
    "Before you act on it",
    run.warnings.length > 0 && el("ul", { class: "warnings" }, run.warnings.map((warning) => el("li", {}, sentence(warning.detail)))),
    el("ul", {}, [first, ...others].filter((caution) => caution !== "").map((caution) => el("li", {}, sentence(caution)))),
  );
}

function takeAlong(run, request, shown) {
  const at = `/v1/forecasts/${encodeURIComponent(run.id)}`;
  const link = (text, href, file, attributes = {}) => el("li", {}, el("a", { href, download: file, ...attributes }, text));
  const chart = (text, kind) => link(text, chartPath(run, kind, shown), `tailcast-${kind}.svg`, { "data-chart": kind });
  const { line, inFile } = curlLine(location.origin, request);
  const id = freshId("curl");
  const text = el("textarea", { id, class: "line", readonly: true, rows: 3, spellcheck: "false", ".value": line, onfocus: (event) => event.target.select() });
  const copied = el("span", { class: "help", role: "status" });
  const copy = async () => {
    text.select();
    // Only a page from this machine or over TLS may write to the clipboard; elsewhere the line stands marked.
    const done = await navigator.clipboard?.writeText(line).then(() => true, () => false);
    copied.textContent = done ? "Copied." : "Marked: copy it with the keyboard.";
  };
  return section(
    "Take it along",
    el(
      "ul",
      { class: "along" },
      link("Table as CSV", `${at}?format=csv`, "tailcast-forecast.csv"),
      run.limits.length > 0 && link("Limits as CSV", `${at}?format=csv&part=limits`, "tailcast-limits.csv"),
      run.scenarios.length > 0 && link("What-ifs as CSV", `${at}?format=csv&part=scenarios`, "tailcast-scenarios.csv"),
      chart("Growth as SVG", "growth"),
      chart("All degrees as SVG", "tail"),
      run.scenarios.length > 0 && chart("What-ifs as SVG", "scenarios"),
      el("li", {}, el("a", { href: `${at}?format=html` }, "Report to print")),
      link("Everything as JSON", at, "tailcast-forecast.json"),
    ),
    el("p", {}, el("label", { for: id }, "The same from a shell")),
    text,
    el(
      "p",
      { class: "actions" },
      el("button", { type: "button", onclick: copy }, "Copy the line"),
      inFile && el("button", { type: "button", onclick: () => saveRequest(request.body) }, `Save ${REQUEST_FILE}, which it reads`),
      copied,
    ),
  );
}

function saveRequest(body) {
  const address = URL.createObjectURL(new Blob([body], { type: "application/json" }));
  el("a", { href: address, download: REQUEST_FILE }).click();
  setTimeout(() => URL.revokeObjectURL(address), 10_000);
}
