// Pastes nobody wants, and a service that does not answer.

import assert from "node:assert/strict";
import test, { after, before } from "node:test";
import { enter, example, loadDemo, openPage, paste, startBrowser, startService, textLike, textOf } from "./harness.mjs";

let browser;
let running;

before(async () => {
  [browser, running] = await Promise.all([startBrowser(), startService()]);
});

after(async () => {
  await browser?.close();
  await running?.stop();
});

async function visit(steps, options) {
  const visit = await openPage(browser, running.base, options);
  try {
    await steps(visit.page, visit.asked);
  } finally {
    await visit.close();
  }
}

test("scripts in a paste stay text", () =>
  visit(async (page) => {
    const evil = "<img src=x onerror=alert(1)>,<script>alert(2)</script>\n";
    await paste(page, evil + "</textarea><svg onload=alert(3)>,5\n1,2");
    const told = await textOf(page, "#paste-state .problem");
    assert.match(told, /Line 2: The degree “<\/textarea><svg onload=alert\(3\)>” is not a number/);
    await page.click("#empty");
    await page.waitForFunction(() => document.getElementById("paste").value === "", { polling: 50 });
    await loadDemo(page);
    await enter(page, '#limits [data-key="name"]', "<img src=x onerror=alert(4)>");
    await enter(page, '#scenarios [data-key="name"]', "\"><script>alert(5)</script>");
    await page.click("#submit");
    await textLike(page, ".limit h4", /onerror/);
    assert.equal((await page.$$("#answer script, #answer img[src=x]")).length, 0);
  }));

test("garbage is refused in words", () =>
  visit(async (page) => {
    let state = 12345;
    const noise = Array.from({ length: 20_000 }, () => {
      state = (state * 1103515245 + 12345) % 2147483648;
      return String.fromCharCode(state % 0xd7ff);
    }).join("");
    for (const text of [noise, "{".repeat(50_000), "[".repeat(50_000), "\u0000".repeat(1000), "1,2,3,4\n".repeat(3), "e,1\nNaN,2\nInfinity,3", "1e400,5"]) {
      await paste(page, text);
      await page.waitForSelector("#paste-state .problem li");
      await page.$eval("#paste", (field) => {
        field.value = "";
      });
    }
    await paste(page, "0,5\n1,2");
    await textLike(page, "#paste-state", /7 nodes with 2 links/);
  }));

test("a million rows are read or refused, and the page stays usable", () =>
  visit(
    async (page) => {
      await enter(page, "#arrivals", "40");
      // One degree in a million lines: the first repeats are told, the others counted.
      const began = Date.now();
      await page.evaluate(() => {
        const data = new DataTransfer();
        data.setData("text/plain", "7,1\n".repeat(1_000_000));
        document.getElementById("paste").dispatchEvent(new ClipboardEvent("paste", { clipboardData: data, bubbles: true, cancelable: true }));
      });
      assert.match(await textOf(page, "#paste-state .problem"), /degree 7 comes twice.*and 999,991 more/s);
      console.log(`a million lines of one degree refused in ${Date.now() - began} ms`);
      // A million different degrees: there is an answer, or the service says in words why not.
      await page.evaluate(() => {
        const rows = Array.from({ length: 1_000_000 }, (_, i) => `${i}\t${i < 1000 ? 1000 - i : 1}`);
        const data = new DataTransfer();
        data.setData("text/plain", rows.join("\n"));
        document.getElementById("paste").dispatchEvent(new ClipboardEvent("paste", { clipboardData: data, bubbles: true, cancelable: true }));
      });
      assert.match(await textOf(page, "#paste-state .read"), /1,000,000 different degrees/);
      assert.equal(await page.$eval("#paste", (field) => field.value), "", "so much is not put into the field");
      const outcome = await page.waitForSelector("#answer .finding, #ask-problem .problem", { timeout: 120_000 });
      console.log(`a million degrees: ${(await outcome.evaluate((node) => node.textContent)).slice(0, 120)}`);
      await page.focus("#arrivals");
      assert.equal(await page.evaluate(() => document.activeElement.id), "arrivals");
    },
    { refusals: true },
  ));

test("each fault that the service finds leads to its field", () =>
  visit(
    async (page) => {
      await loadDemo(page);
      await enter(page, '#limits [data-key="max_nodes"]', "");
      await enter(page, "#until", "2020-01-01");
      await page.click("#submit");
      const told = await textOf(page, "#ask-problem .problem");
      assert.match(told, /At most … of them: /);
      assert.match(told, /Look ahead until: /);
      assert.equal(await page.$eval('#limits [data-key="max_nodes"]', (field) => field.getAttribute("aria-invalid")), "true");
      await page.evaluate(() => [...document.querySelectorAll("#ask-problem .place")].find((place) => place.textContent.startsWith("Look ahead")).click());
      assert.equal(await page.evaluate(() => document.activeElement.id), "until");
      // What the service refuses as impossible comes with its remedy.
      await enter(page, "#until", "2027-08-01");
      await enter(page, '#limits [data-key="max_nodes"]', "160");
      await enter(page, "#arrivals", "");
      await page.click("#submit");
      assert.match(await textLike(page, "#ask-problem .problem", /arrive a day/), /New nodes a day: /);
    },
    { refusals: true },
  ));

test("a busy service is asked again by itself, with the same key", () => {
  const keys = [];
  return visit(
    async (page) => {
      await loadDemo(page);
      assert.equal(keys.length, 3);
      assert.equal(new Set(keys).size, 1, "one run, however often it is asked for");
    },
    {
      refusals: true,
      prepare: (page) =>
        intercept(page, (request) => {
          if (request.method() !== "POST") return request.continue();
          keys.push(request.headers()["idempotency-key"]);
          if (keys.length > 2) return request.continue();
          const body = JSON.stringify({ type: "about:blank", title: "Service Unavailable", status: 503, code: "busy", detail: "All places are taken.", request_id: "1" });
          return request.respond({ status: 503, contentType: "application/problem+json", headers: { "Retry-After": "1" }, body });
        }),
    },
  );
});

test("a service that cannot be reached is said so, and trying again works", () => {
  let down = true;
  return visit(
    async (page) => {
      await page.click("#demo");
      assert.match(await textOf(page, "#ask-problem .problem"), /cannot be reached.*still here/s);
      down = false;
      await page.evaluate(() => document.querySelector("#ask-problem button").click());
      await page.waitForSelector("#answer .finding");
      assert.equal(await page.$("#ask-problem .problem"), null);
    },
    { refusals: true, prepare: (page) => intercept(page, (request) => (down && request.method() === "POST" ? request.abort() : request.continue())) },
  );
});

async function intercept(page, answer) {
  await page.setRequestInterception(true);
  page.on("request", (request) => answer(request));
}

test("counts are not lost when storage is full", () =>
  visit(async (page) => {
    await page.evaluate(() => {
      Storage.prototype.setItem = () => {
        throw new DOMException("full", "QuotaExceededError");
      };
    });
    await enter(page, "#arrivals", "40");
    await paste(page, await example("heronsgate/2026-08-01.csv"));
    await page.waitForSelector("#answer .finding");
  }));
