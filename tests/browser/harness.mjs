// The real service, a real browser, and what every test watches for.

import assert from "node:assert/strict";
import { spawn } from "node:child_process";
import { mkdir, mkdtemp, readFile, rm } from "node:fs/promises";
import { createServer } from "node:net";
import { createRequire } from "node:module";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";
import puppeteer from "puppeteer-core";

const HERE = fileURLToPath(new URL(".", import.meta.url));
const ROOT = join(HERE, "../..");
const AXE = createRequire(import.meta.url).resolve("axe-core/axe.min.js");

/** Longest wait for anything on the page, milliseconds: the machine of a test may be busy. */
export const PATIENCE = 60_000;

/** A service of its own on a free port, with a database that is thrown away. */
export async function startService(settings = {}) {
  const folder = await mkdtemp(join(tmpdir(), "tailcast-page-"));
  const port = await freePort();
  const base = `http://127.0.0.1:${port}`;
  const binary = process.env.SERVICE_BINARY ?? join(ROOT, "target/debug/tailcast");
  const database = { TAILCAST_DATABASE_URL: `sqlite://${join(folder, "page.db")}` };
  const child = spawn(binary, ["serve"], {
    env: {
      // The service refuses variables of its name that are no settings.
      ...Object.fromEntries(Object.entries(process.env).filter(([name]) => !name.startsWith("TAILCAST_"))),
      TAILCAST_BIND: `127.0.0.1:${port}`,
      ...database,
      TAILCAST_LOG_FILTER: "warn",
      // A machine that is shared is slow at times; what is slow is measured, not refused.
      TAILCAST_COMPUTE_BUDGET_SECONDS: "120",
      ...settings,
    },
    stdio: ["ignore", "ignore", "inherit"],
  });
  const failed = new Promise((_, reject) => {
    child.once("error", (error) => reject(new Error(`${binary}: ${error.message}; build it, or name it in SERVICE_BINARY`)));
    child.once("exit", (code) => reject(new Error(`the service stopped with ${code}`)));
  });
  failed.catch(() => {});
  await Promise.race([ready(base), failed]);
  return {
    base,
    binary,
    settings: { ...database, ...settings },
    async stop() {
      const gone = new Promise((resolve) => child.once("exit", resolve));
      child.kill("SIGTERM");
      await gone;
      await rm(folder, { recursive: true, force: true });
    },
  };
}

async function ready(base) {
  for (let tried = 0; tried < 200; tried += 1) {
    const answer = await fetch(`${base}/readyz`).catch(() => null);
    if (answer?.ok) return;
    await new Promise((resolve) => setTimeout(resolve, 100));
  }
  throw new Error("the service did not become ready");
}

function freePort() {
  return new Promise((resolve, reject) => {
    const server = createServer();
    server.once("error", reject);
    server.listen(0, "127.0.0.1", () => {
      const { port } = server.address();
      server.close(() => resolve(port));
    });
  });
}

/** A headless browser; `CHROMIUM` names another than Debian's. */
export function startBrowser() {
  return puppeteer.launch({
    executablePath: process.env.CHROMIUM ?? "/usr/bin/chromium",
    headless: true,
    // In a container Chromium's own sandbox is not to be had; the pages it opens are this service's alone.
    args: ["--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--disable-background-networking"],
    protocolTimeout: 180_000,
  });
}

/**
 * A page of its own, as a first-time visitor has it. `refusals` says that the test provokes refused requests, which the
 * browser logs as errors. `close()` fails the test on anything that went wrong unseen.
 */
export async function openPage(browser, base, { width = 1280, height = 900, theme = "light", refusals = false, hash = "", prepare } = {}) {
  const context = await browser.createBrowserContext();
  const page = await context.newPage();
  page.setDefaultTimeout(PATIENCE);
  const troubles = [];
  page.on("console", (message) => {
    if (message.type() !== "error" && message.type() !== "warn") return;
    if (refusals && message.text().startsWith("Failed to load resource")) return;
    troubles.push(`console: ${message.text()}`);
  });
  page.on("pageerror", (error) => troubles.push(`uncaught: ${error.message}`));
  page.on("dialog", (dialog) => {
    troubles.push(`dialog: ${dialog.message()}`);
    dialog.dismiss();
  });
  const asked = [];
  page.on("request", (request) => {
    asked.push({ method: request.method(), url: request.url() });
    // The browser's own marks on fields of dates are data addresses.
    const own = [`${base}/`, `blob:${base}/`, "data:"].some((start) => request.url().startsWith(start));
    if (!own) troubles.push(`a request left the origin: ${request.url().slice(0, 200)}`);
  });
  await page.setViewport({ width, height, isMobile: width < 500, hasTouch: width < 500 });
  await page.emulateMediaFeatures([{ name: "prefers-color-scheme", value: theme }]);
  await prepare?.(page);
  await page.goto(`${base}/${hash}`, { waitUntil: "load" });
  await page.waitForSelector("#view-ask:not([hidden]), #view-networks:not([hidden]), #view-network:not([hidden])");
  return {
    page,
    asked,
    async close() {
      await context.close();
      assert.deepEqual(troubles, []);
    },
  };
}

/** Pastes a text into the field of the counts as a person does. */
export async function paste(page, text) {
  await page.evaluate((pasted) => {
    const data = new DataTransfer();
    data.setData("text/plain", pasted);
    const field = document.getElementById("paste");
    field.focus();
    field.select();
    const event = new ClipboardEvent("paste", { clipboardData: data, bubbles: true, cancelable: true });
    // What the page leaves to the browser: the text lands in the field.
    if (field.dispatchEvent(event)) field.setRangeText(pasted);
  }, text);
}

/** Puts a value into a field as if typed. */
export async function enter(page, selector, value) {
  await page.$eval(
    selector,
    (field, typed) => {
      field.value = typed;
      field.dispatchEvent(new Event("input", { bubbles: true }));
      field.dispatchEvent(new Event("change", { bubbles: true }));
    },
    value,
  );
}

/** The text of the first element that fits, when there is one. */
export async function textOf(page, selector) {
  await page.waitForSelector(selector);
  return page.$eval(selector, (node) => node.textContent.trim());
}

/** Waits until an element says something that fits the pattern, and answers it. */
export async function textLike(page, selector, pattern) {
  await page.waitForFunction(
    (where, source) => new RegExp(source).test(document.querySelector(where)?.textContent ?? ""),
    { polling: 50 },
    selector,
    pattern.source,
  );
  return textOf(page, selector);
}

/** Asks for the forecast and waits for a new answer. */
export async function ask(page) {
  const before = await page.$eval("#answer", (answer) => answer.dataset.run ?? "");
  await page.click("#submit");
  await page.waitForFunction((run) => (document.getElementById("answer").dataset.run ?? "") !== run, { polling: 50 }, before);
}

/** Loads the demo and waits for its forecast with its charts. */
export async function loadDemo(page) {
  await page.click("#demo");
  await page.waitForSelector("#answer .finding");
  await chartsDrawn(page);
}

/** Waits until every chart of the answer is drawn. */
export async function chartsDrawn(page, within = "#answer") {
  await page.waitForFunction(
    (where) => {
      const figures = [...document.querySelectorAll(`${where} figure.chart`)];
      return figures.length > 0 && figures.every((figure) => figure.querySelector("img")?.complete && figure.querySelector("img").naturalWidth > 0);
    },
    { polling: 50 },
    within,
  );
}

/** What the accessibility checker finds serious or critical (axe-core, rules of WCAG 2.1 A and AA and best practice). */
export async function seriousViolations(page) {
  await page.evaluate(await readFile(AXE, "utf8"));
  const found = await page.evaluate(async () => {
    const { violations } = await globalThis.axe.run(document, { resultTypes: ["violations"] });
    return violations.map(({ id, impact, nodes }) => ({ id, impact, at: nodes.slice(0, 3).map((node) => node.html.slice(0, 160)) }));
  });
  return found.filter(({ impact }) => impact === "serious" || impact === "critical");
}

/** How many pixels the page is wider than its window. */
export function overflow(page) {
  return page.evaluate(() => document.documentElement.scrollWidth - document.documentElement.clientWidth);
}

/** A picture of the whole page, for people to look at. */
export async function shot(page, name) {
  await mkdir(join(HERE, "shots"), { recursive: true });
  await page.screenshot({ path: join(HERE, "shots", `${name}.png`), fullPage: true });
}

/** An example file of the repository. */
export function example(path) {
  return readFile(join(ROOT, "examples", path), "utf8");
}

/** A call of the service from the test itself. */
export async function service(base, method, path, body, type = "application/json") {
  const sent = body === undefined || typeof body === "string" ? body : JSON.stringify(body);
  const response = await fetch(base + path, { method, body: sent, headers: sent === undefined ? {} : { "Content-Type": type } });
  const text = await response.text();
  assert.ok(response.ok, `${method} ${path}: ${response.status} ${text.slice(0, 500)}`);
  return text.startsWith("{") ? JSON.parse(text) : text;
}
