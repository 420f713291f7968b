// Work under way: progress as it comes, and a way to call it off.

import { announce, el, fill } from "./dom.mjs";
import { call } from "./http.mjs";
import { accessKey } from "./key.mjs";
import { moment, percent } from "./words.mjs";

const KINDS = { link_list: "Counting a link list", refresh: "Making the latest forecast", backtest: "Replaying past forecasts" };
const ENDED = { succeeded: "done", failed: "failed", cancelled: "called off" };
/** Jobs that have ended and are still told. */
const ENDED_SHOWN = 3;
/** Time between two looks at a job that has no stream, milliseconds. */
const AGAIN = 3_000;

/** Shows jobs of a network, newest first; `onEnd` is told when a live one ends. Answers how to stop watching. */
export function watchJobs(box, jobs, onEnd) {
  const live = jobs.filter(isLive);
  const ended = jobs.filter((job) => !isLive(job)).slice(0, ENDED_SHOWN);
  if (jobs.length === 0) {
    fill(box, el("p", { class: "help" }, "Nothing has been worked at yet."));
    return () => {};
  }
  fill(box, live.length === 0 && el("p", {}, "Nothing is at work."), el("ul", { class: "jobs" }, [...live, ...ended].map(line)));
  const streams = live.map((job) => stream(box, job, onEnd));
  return () => streams.forEach((one) => one.close());
}

function isLive(job) {
  return job.state === "waiting" || job.state === "running";
}

function line(job) {
  const item = el("li", { "data-job": job.id });
  show(item, job);
  return item;
}

function show(item, job) {
  const name = KINDS[job.kind] ?? job.kind;
  if (!isLive(job)) {
    const why = job.problem ? `: ${job.problem.detail}` : "";
    fill(item, `${name}, ${ENDED[job.state] ?? job.state}${job.ended_at ? ` on ${moment(job.ended_at)}` : ""}${why}`);
    return;
  }
  // What is there stays there while it comes on, so that the button keeps its focus.
  const [progress, said] = [item.querySelector("progress"), item.querySelector("span")];
  const share = job.progress ?? null;
  const words = job.state === "waiting" ? "waits its turn" : share === null ? "at work" : percent(share);
  if (progress) {
    said.textContent = words;
    setProgress(progress, share);
    return;
  }
  const bar = el("progress", { max: 1, "aria-label": `${name}: progress` });
  setProgress(bar, share);
  const callOff = el("button", { type: "button", onclick: () => cancel(item, job) }, "Call it off");
  fill(item, `${name} `, bar, " ", el("span", {}, words), " ", callOff);
}

function setProgress(bar, share) {
  if (share === null) bar.removeAttribute("value");
  else bar.value = share;
}

async function cancel(item, job) {
  try {
    await call(`/v1/jobs/${encodeURIComponent(job.id)}`, { method: "DELETE" });
    announce("Called off.");
  } catch (problem) {
    item.append(el("p", { class: "help", role: "alert" }, problem.detail));
  }
}

// Server-Sent Events, each a job as JSON. The browser connects again by itself until the job has ended; where the service has no
// place for another stream, or asks for a key, which a browser sends with no stream, the job is asked for now and then.
function stream(box, job, onEnd) {
  const path = `/v1/jobs/${encodeURIComponent(job.id)}`;
  const events = accessKey() ? null : new EventSource(path);
  let timer;
  let ended = false;
  const close = () => {
    events?.close();
    ended = true;
    clearTimeout(timer);
  };
  const told = (now) => {
    const item = box.querySelector(`[data-job="${CSS.escape(now.id)}"]`);
    if (item) show(item, now);
    if (isLive(now)) return;
    close();
    announce(`${KINDS[now.kind] ?? now.kind}: ${ENDED[now.state] ?? now.state}.`);
    onEnd(now);
  };
  const ask = async () => {
    timer = setTimeout(ask, AGAIN);
    try {
      const { data } = await call(path);
      if (!ended) told(data);
    } catch {
      // It is asked again.
    }
  };
  if (events === null) {
    timer = setTimeout(ask, AGAIN);
    return { close };
  }
  events.addEventListener("message", (event) => told(JSON.parse(event.data)));
  events.addEventListener("error", () => {
    if (events.readyState === EventSource.CLOSED && timer === undefined) timer = setTimeout(ask, AGAIN);
  });
  return { close };
}
