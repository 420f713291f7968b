// Calls of the service that serves this page, and of nothing else.

import { el } from "./dom.mjs";
import { accessKey, askForKey, keyHeaders } from "./key.mjs";

/** Times that a call is made again by itself when the service says it is busy. */
const RETRIES = 3;
/** Longest wait before a call is made again by itself, seconds. */
const LONGEST_WAIT = 15;

/** What went wrong: a problem document of the service's, or that it could not be reached. */
export class Problem extends Error {
  constructor({ title, detail, status = 0, code = "", faults = [], retryAfter = null, requestId = "" }) {
    super(detail);
    Object.assign(this, { title, detail, status, code, faults, retryAfter, requestId });
  }

  /** Whether the same call may go better later. */
  get passing() {
    return this.status === 0 || this.status === 503 || this.status === 429 || this.status === 408;
  }
}

/** One call, with the access key where there is one; asks for a key where the service does. Answers `{data, text, headers, status}`,
 * `data` an object for JSON and text for all else. */
export async function call(path, options = {}) {
  for (;;) {
    const used = accessKey();
    try {
      return await callOnce(path, options);
    } catch (problem) {
      if (problem.status !== 401) throw problem;
      // Another call may have been given one meanwhile.
      if (accessKey() === used && !(await askForKey(problem.detail))) throw problem;
    }
  }
}

async function callOnce(path, { method = "GET", body, headers = {}, signal } = {}) {
  const sent = { ...(body === undefined ? {} : { "Content-Type": "application/json" }), ...headers, ...keyHeaders() };
  let response;
  let text;
  try {
    response = await fetch(path, { method, headers: sent, body, signal, cache: "no-cache", redirect: "error" });
    text = await response.text();
  } catch (error) {
    if (error.name === "AbortError") throw error;
    throw new Problem({
      title: "The service cannot be reached",
      detail: "Nothing came back. It may have stopped, or the network between may be down; what you entered is still here.",
    });
  }
  const type = response.headers.get("Content-Type") ?? "";
  const data = /json/.test(type) ? parsed(text) : text;
  if (!response.ok) throw problemOf(response, data);
  return { data, text, headers: response.headers, status: response.status };
}

/** The same, made again a few times while the service is busy; `onWait(seconds)` is told before each wait. */
export async function patiently(path, options, onWait) {
  for (let tried = 0; ; tried += 1) {
    try {
      return await call(path, options);
    } catch (problem) {
      const wait = problem.retryAfter;
      const again = (problem.status === 503 || problem.status === 429) && wait !== null && wait <= LONGEST_WAIT && tried < RETRIES;
      if (!again) throw problem;
      onWait(wait);
      await pause(1000 * wait, options.signal);
    }
  }
}

/** Follows a link to an answer of the service. A browser sends no key with a link, so where there is one the answer is fetched, and saved. */
export async function followWithKey(event) {
  const link = event.target.closest?.('a[href^="/v1/"]');
  if (!link || !accessKey()) return;
  event.preventDefault();
  const { text, headers } = await call(link.getAttribute("href"));
  const address = URL.createObjectURL(new Blob([text], { type: headers.get("Content-Type") ?? "" }));
  el("a", { href: address, download: link.getAttribute("download") ?? "tailcast-report.html" }).click();
  setTimeout(() => URL.revokeObjectURL(address), 60_000);
}

/** A key that makes a call safe to repeat. */
export function idempotencyKey() {
  return Array.from(crypto.getRandomValues(new Uint8Array(16)), (byte) => byte.toString(16).padStart(2, "0")).join("");
}

function pause(milliseconds, signal) {
  return new Promise((resolve, reject) => {
    const timer = setTimeout(resolve, milliseconds);
    signal?.addEventListener("abort", () => {
      clearTimeout(timer);
      reject(signal.reason);
    });
  });
}

function parsed(text) {
  try {
    return JSON.parse(text);
  } catch {
    return text;
  }
}

function problemOf(response, data) {
  const retry = Number(response.headers.get("Retry-After"));
  const said = data !== null && typeof data === "object" ? data : {};
  return new Problem({
    title: said.title ?? `Answer ${response.status}`,
    detail: said.detail ?? "The answer does not say why.",
    status: response.status,
    code: said.code ?? "",
    faults: Array.isArray(said.errors) ? said.errors : [],
    retryAfter: response.headers.has("Retry-After") && Number.isFinite(retry) ? retry : null,
    requestId: said.request_id ?? "",
  });
}
