// The view in which counts are pasted and a forecast is asked for.

import { showAnswer } from "./answer.mjs";
import { pickThresholds, totals } from "./defaults.mjs";
import { demo } from "./demo.mjs";
import { announce, byId, el, fill, keep, kept, readable } from "./dom.mjs";
import { formOf, propose } from "./fields.mjs";
import { call, idempotencyKey, patiently } from "./http.mjs";
import { readPaste } from "./paste.mjs";
import { clearProblem, fieldFinder, showProblem } from "./problem.mjs";
import { forecastBody, fromBody, knowsArrivals } from "./request.mjs";
import { count, day } from "./words.mjs";

/** Longest text that is shown in the field: a larger one makes the browser slow, and nobody reads it. */
const MOST_SHOWN = 300_000;
/** Largest text that is read, characters; the service takes 16 MiB. */
const MOST_READ = 64_000_000;

let form;
/** `{counts, lines, base}` of what was pasted, or nothing. */
let evidence = null;
/** The call under way. */
let asking = null;
/** Key of the last call, kept while it has no answer so that trying again makes no second run. */
let attempt = null;

/** Makes the view work, with what was entered before the last reload. */
export function startAsk() {
  form = formOf(changed);
  const before = form.restore();
  form.fresh();
  if (before) restore(before);
  const paste = byId("paste");
  paste.addEventListener("paste", (event) => {
    const text = event.clipboardData?.getData("text/plain") ?? "";
    // A paste into an empty field is the whole of it; one into text is an edit.
    if (text === "" || (paste.value !== "" && paste.selectionEnd - paste.selectionStart < paste.value.length)) return;
    event.preventDefault();
    take(text);
  });
  paste.addEventListener("change", () => take(paste.value));
  byId("choose").addEventListener("click", () => byId("file").click());
  byId("file").addEventListener("change", () => takeFile(byId("file").files[0]));
  byId("demo").addEventListener("click", loadDemo);
  byId("empty").addEventListener("click", startAfresh);
  byId("ask").addEventListener("submit", (event) => {
    event.preventDefault();
    if (readable(byId("ask"))) submit();
  });
  watchDrops(byId("drop"));
}

function restore(before) {
  form.write(before.entered);
  if (!before.evidence) return;
  evidence = before.evidence;
  showText(evidence.counts.map((pair) => pair.join("\t")).join("\n"));
  told([]);
  const run = kept("tailcast.run");
  if (run) showKept(run);
}

// The run is kept by the service: a reload shows it again instead of making another.
async function showKept(run) {
  try {
    const { data } = await call(`/v1/forecasts/${encodeURIComponent(run.id)}`);
    show(data, run.request);
  } catch {
    keep("tailcast.run", null);
  }
}

function watchDrops(zone) {
  const over = (on) => (event) => {
    event.preventDefault();
    zone.classList.toggle("over", on);
  };
  zone.addEventListener("dragover", over(true));
  zone.addEventListener("dragleave", over(false));
  zone.addEventListener("drop", (event) => {
    over(false)(event);
    const file = event.dataTransfer.files[0];
    if (file) takeFile(file);
    else take(event.dataTransfer.getData("text/plain"));
  });
}

async function takeFile(file) {
  if (!file) return;
  if (file.size > MOST_READ) {
    byId("file").value = "";
    refuse([{ detail: `${file.name} has ${count(file.size / 1e6)} MB; the page reads up to ${MOST_READ / 1e6} MB. Send larger counts with the calls.` }], 0);
    return;
  }
  try {
    take(await file.text());
  } catch (fault) {
    refuse([{ detail: `${file.name} cannot be read: ${fault.message}` }], 0);
  } finally {
    byId("file").value = "";
  }
}

// Reads counts, says what was read, and asks for the forecast at once when nothing more is needed.
function take(text) {
  showText(text);
  if (text.trim() === "") {
    evidence = null;
    fill(byId("paste-state"));
    return;
  }
  const read = text.length > MOST_READ
    ? { faults: [{ detail: `This has ${count(text.length / 1e6)} million characters; the page reads up to ${MOST_READ / 1e6} million.` }], more: 0 }
    : readPaste(text);
  if (read.faults.length > 0) {
    refuse(read.faults, read.more);
    return;
  }
  evidence = { counts: read.counts, lines: read.lines };
  const notes = [...read.notes];
  if (read.body) {
    let pasted;
    try {
      pasted = fromBody(read.body);
    } catch {
      refuse([{ detail: "This request has a limit or a what-if that is not written as one." }], 0);
      return;
    }
    const { entered, base, taken } = pasted;
    evidence.base = base;
    form.write(entered);
    if (taken.length > 0) notes.push(`A whole request was read. It goes on with ${taken.map((key) => key.replaceAll("_", " ")).join(", ")} as pasted.`);
  } else if (read.asOf) {
    form.write({ asOf: read.asOf.slice(0, 10) });
    propose(read.asOf.slice(0, 10));
  }
  told(notes);
  changed();
  if (ready()) submit();
  else {
    byId("arrivals").focus();
    announce("The counts are read. Say how many nodes arrive a day.");
  }
}

function ready() {
  return evidence !== null && (form.read().arrivals !== "" || knowsArrivals(evidence.base));
}

function showText(text) {
  const paste = byId("paste");
  paste.value = text.length > MOST_SHOWN ? "" : text;
  byId("empty").hidden = text === "";
}

function told(notes) {
  const { nodes, ends, degrees, largest } = totals(evidence.counts);
  const lines = [
    `${count(nodes)} nodes with ${count(ends)} links, ${count(degrees)} different degrees, the largest ${count(largest)}.`,
    ...notes,
  ];
  byId("paste").removeAttribute("aria-invalid");
  fill(byId("paste-state"), el("ul", { class: "read" }, lines.map((line) => el("li", {}, line))));
  byId("thresholds").placeholder = pickThresholds(evidence.counts).join(", ");
}

function refuse(faults, more) {
  evidence = null;
  byId("paste").setAttribute("aria-invalid", "true");
  const place = (fault) => (fault.line ? `Line ${fault.line}: ` : fault.row ? `Row ${fault.row}: ` : "");
  const box = el(
    "div",
    { class: "problem", role: "alert" },
    el("h3", {}, "These counts cannot be read"),
    el("ul", {}, faults.map((fault) => el("li", {}, place(fault), fault.detail))),
    more > 0 && el("p", {}, `and ${count(more)} more of the kind.`),
  );
  fill(byId("paste-state"), box);
}

async function loadDemo() {
  try {
    const { text, entered } = await demo();
    form.write(entered);
    byId("until").dataset.proposed = entered.until;
    take(text);
  } catch (problem) {
    showProblem(byId("ask-problem"), problem, { retry: loadDemo });
  }
}

function startAfresh() {
  evidence = null;
  attempt = null;
  asking?.abort();
  keep("tailcast.run", null);
  keep("tailcast.ask", null);
  location.reload();
}

function changed() {
  form.save(evidence);
  const shown = byId("answer").dataset.run;
  byId("changed").textContent = shown ? "You have changed something: ask again to see what it does." : "";
}

async function submit() {
  const box = byId("ask-problem");
  clearProblem(box, byId("ask"));
  if (evidence === null && byId("paste").value.trim() === "") {
    localFault(box, { pointer: "/snapshots", detail: "Paste the degree counts first, or load the demo." });
    return;
  }
  if (evidence === null) {
    byId("paste").focus();
    return;
  }
  const { body, faults } = forecastBody(form.read(), evidence, pickThresholds(evidence.counts));
  if (faults.length > 0) {
    localFault(box, ...faults);
    return;
  }
  await send(JSON.stringify(body), box);
}

// What the page itself finds is told like what the service finds.
function localFault(box, ...faults) {
  const problem = { status: 400, title: "", detail: "Nothing was sent yet.", faults, requestId: "" };
  showProblem(box, problem, { fieldOf, placeOf: () => null });
  fieldOf(faults[0].pointer)?.focus();
}

async function send(body, box) {
  asking?.abort();
  asking = new AbortController();
  const { signal } = asking;
  if (attempt?.body !== body) attempt = { body, key: idempotencyKey() };
  const request = { method: "POST", path: "/v1/forecasts", body };
  busy("Working it out…");
  try {
    const options = { method: "POST", body, headers: { "Idempotency-Key": attempt.key }, signal };
    const { data } = await patiently(request.path, options, (wait) => busy(`The service is busy; asking again in ${wait} s…`));
    attempt = null;
    keep("tailcast.run", body.length < 1_000_000 ? { id: data.id, request } : null);
    show(data, request);
  } catch (problem) {
    if (problem.name === "AbortError") return;
    busy("");
    showProblem(box, problem, { fieldOf, placeOf, retry: () => send(body, fill(box)) });
    box.querySelector("button")?.focus();
  }
}

function show(run, request) {
  busy("");
  byId("answer").dataset.run = run.id;
  showAnswer(byId("answer"), run, request);
}

function busy(text) {
  byId("changed").textContent = text;
  if (text !== "") byId("submit").setAttribute("aria-busy", "true");
  else byId("submit").removeAttribute("aria-busy");
  if (text !== "") announce(text);
}

// A pointer into the counts has its line; one into earlier counts, or into what has no field, has words.
function placeOf(pointer) {
  const at = /^\/snapshots\/(\d+)\/degree_counts\/(\d+)/.exec(pointer);
  const earlier = evidence?.base?.snapshots?.length ?? 0;
  if (at && Number(at[1]) === earlier) {
    const row = Number(at[2]);
    const line = evidence.lines?.[row];
    return line === undefined ? `Pair ${row + 1} of the counts` : `Line ${line} of the counts`;
  }
  if (at) return `Pair ${Number(at[2]) + 1} of the counts of ${day(evidence.base.snapshots[at[1]].as_of)}`;
  const whole = /^\/(limits|scenarios)\/(\d+)$/.exec(pointer);
  return whole ? `${whole[1] === "limits" ? "Limit" : "What-if"} ${Number(whole[2]) + 1}` : null;
}

function fieldOf(pointer) {
  const earlier = evidence?.base?.snapshots?.length ?? 0;
  return fieldFinder(byId("ask"))(pointer.replace(`/snapshots/${earlier}/as_of`, "/snapshots/0/as_of"));
}
