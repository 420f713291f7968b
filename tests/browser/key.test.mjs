// A service that asks for keys: the page asks, keeps the key for its tab, sends it with every call, and forgets it.

import assert from "node:assert/strict";
import { execFile } from "node:child_process";
import test, { after, before } from "node:test";
import { promisify } from "node:util";
import { chartsDrawn, example, openPage, seriousViolations, shot, startBrowser, startService, textLike, textOf } from "./harness.mjs";

let browser;
let running;
let key;

before(async () => {
  [browser, running] = await Promise.all([startBrowser(), startService({ TAILCAST_ACCESS_KEYS: "required" })]);
  const { TAILCAST_DATABASE_URL } = running.settings;
  const env = { ...Object.fromEntries(Object.entries(process.env).filter(([name]) => !name.startsWith("TAILCAST_"))), TAILCAST_DATABASE_URL };
  const { stdout } = await promisify(execFile)(running.binary, ["keys", "create", "planner", "--scope", "write"], { env });
  key = stdout.trim();
});

after(async () => {
  await browser?.close();
  await running?.stop();
});

async function giveKey(page, given) {
  await page.waitForSelector("dialog[open] #access-key");
  await page.type("#access-key", given);
  await page.keyboard.press("Enter");
}

test("the page asks for a key, works with it, and forgets it", async () => {
  const { page, asked, close } = await openPage(browser, running.base, { refusals: true });
  assert.equal(await page.$("dialog"), null, "nothing is asked before a call needs it");
  await page.click("#demo");
  await page.waitForSelector("dialog[open]");
  assert.equal(await page.evaluate(() => document.activeElement.id), "access-key");
  assert.deepEqual(await seriousViolations(page), []);
  await shot(page, "key");
  // Not now, by the keyboard: the problem is told, and the page goes on.
  await page.keyboard.press("Escape");
  await textLike(page, "#ask-problem", /asks for an access key/);
  await page.click("#submit");
  await giveKey(page, `tailcast_${"0".repeat(16)}_${"0".repeat(64)}`);
  await textLike(page, "#access-key-why", /no such access key/i);
  await giveKey(page, key);
  await page.waitForSelector("#answer .finding");
  await chartsDrawn(page);
  assert.equal(await page.$eval("#access-key", (node) => node).catch(() => null), null, "the question is gone");
  const line = await page.$eval("textarea.line", (field) => field.value);
  assert.ok(line.includes("Bearer $TAILCAST_ACCESS_KEY") && !line.includes(key), line.slice(0, 300));
  assert.ok(asked.every(({ url }) => !url.includes(key)), "the key is in no address");

  // A link is fetched with the key and saved.
  const saved = page.waitForResponse((response) => response.url().includes("format=csv") && response.status() === 200);
  await page.click(".along a[href*='format=csv']");
  await saved;

  // Jobs and kept networks.
  const put = (path, body, type) =>
    fetch(running.base + path, { method: "PUT", body, headers: { "Content-Type": type, Authorization: `Bearer ${key}` } }).then((answer) =>
      assert.ok(answer.ok, path),
    );
  await put("/v1/networks/heronsgate", JSON.stringify({ degree_kind: "received" }), "application/json");
  await put("/v1/networks/heronsgate/snapshots/2026-08-01", await example("heronsgate/2026-08-01.csv"), "text/csv");
  await page.evaluate(() => (location.hash = "#networks"));
  await textLike(page, "#view-networks", /heronsgate/);

  // Another tab knows nothing of the key; this one forgets it when told to.
  assert.equal(await page.evaluate(() => localStorage.length), 0);
  await Promise.all([page.waitForNavigation(), page.click("#key button")]);
  assert.equal(await page.evaluate(() => sessionStorage.getItem("access-key")), null);
  await page.waitForSelector("dialog[open]");
  assert.match(await textOf(page, "#access-key-why"), /access key/);
  await close();
});
