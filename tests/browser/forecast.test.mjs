// From a paste to a forecast, and what a planner does with it.

import assert from "node:assert/strict";
import { execFile } from "node:child_process";
import { mkdtemp, readFile, readdir, rm } from "node:fs/promises";
import { tmpdir } from "node:os";
import { join } from "node:path";
import test, { after, before } from "node:test";
import { promisify } from "node:util";
import { ask, chartsDrawn, enter, example, loadDemo, openPage, paste, service, startBrowser, startService, textLike, textOf } from "./harness.mjs";

let browser;
let running;
let base;

before(async () => {
  [browser, running] = await Promise.all([startBrowser(), startService()]);
  base = running.base;
});

after(async () => {
  await browser?.close();
  await running?.stop();
});

/** A page of which the test's own steps are all that happens. */
async function visit(steps, options) {
  const visit = await openPage(browser, base, options);
  try {
    await steps(visit.page, visit.asked);
  } finally {
    await visit.close();
  }
}

const posts = (asked) => asked.filter(({ method }) => method === "POST").length;

test("pasted counts become a forecast when the arrivals are known", () =>
  visit(async (page, asked) => {
    await paste(page, await example("heronsgate/2026-08-01.csv"));
    assert.match(await textOf(page, "#paste-state"), /12,100 nodes with 36,240 links, 105 different degrees, the largest 2,727/);
    assert.equal(await page.evaluate(() => document.activeElement.id), "arrivals");
    assert.equal(posts(asked), 0, "nothing is asked before the arrivals are known");
    await enter(page, "#as-of", "2026-08-01");
    assert.equal(await page.$eval("#until", (field) => field.value), "2027-08-01", "the horizon goes with the day");
    await enter(page, "#arrivals", "40");
    await ask(page);
    const [finding, told] = [await textOf(page, "#answer .finding"), await textLike(page, "#announcement", /nodes with at least/)];
    assert.equal(told, finding, "readers of the screen are told the finding");
    const id = await page.$eval("#answer", (answer) => answer.dataset.run);
    const run = await service(base, "GET", `/v1/forecasts/${id}`);
    const thresholds = run.forecast[0].tail.map((tail) => tail.threshold);
    assert.ok(thresholds.includes(50) && run.forecast.length === 12, `${thresholds}`);
    // The finding is that of the answer, for the largest threshold past which there are 50 nodes.
    const tail = run.forecast.at(-1).tail.filter((one) => one.now >= 50).at(-1);
    const english = (n) => Math.round(n).toLocaleString("en-GB");
    const widest = tail.intervals.at(-1);
    assert.equal(
      finding,
      `${english(tail.now)} nodes with at least ${tail.threshold} links on 1 August 2026; ${english(tail.median)} by 1 August 2027, ` +
        `with 90 % probability between ${english(widest.low)} and ${english(widest.high)}.`,
    );
    assert.match(await textOf(page, "#answer .caution"), /your own engineering practice/);
    const text = await textOf(page, "#answer");
    for (const words of [run.fit.verdict, ...run.cautions, ...run.warnings.map((warning) => warning.detail)]) {
      assert.ok(text.includes(words.slice(1).replace(/[.]$/, "")), words);
    }
    // Every row of the table is that of the answer.
    const rows = await page.$eval("#answer table", (first) => [...first.tBodies[0].rows].map((row) => [...row.cells].map((cell) => cell.textContent)));
    run.forecast.at(-1).tail.forEach((one, i) => {
      assert.deepEqual(rows[i].slice(0, 3), [one.threshold, one.now, one.median].map((n) => n.toLocaleString("en-GB", { maximumFractionDigits: 0 })));
    });
  }));

test("thresholds, limits and what-ifs can be changed and asked again", () =>
  visit(async (page) => {
    await loadDemo(page);
    const first = await textOf(page, "#answer .finding");
    assert.match(first, /81 nodes with at least 50 links on 1 August 2026; \d+ by 1 August 2027/);
    // Another threshold of the answer, without asking again.
    await page.click('.choice input[value="10"]');
    assert.match(await textLike(page, "#answer .finding", /at least 10 links/), /^646 nodes/);
    // Others.
    await enter(page, "#thresholds", "7, 30");
    await textLike(page, "#changed", /ask again/);
    await ask(page);
    const rows = await page.$eval("#answer table", (first) => [...first.tBodies[0].rows].map((row) => row.cells[0].textContent));
    assert.deepEqual(rows, ["7", "30", "all nodes", "largest degree"]);
    // A second limit, passed already.
    await page.click("#limits > button");
    const limit = '#limits [role="group"]:nth-child(2)';
    for (const [key, value] of [["name", "it's <b>full</b>"], ["threshold", "30"], ["max_nodes", "100"], ["by", "2027-03-01"]]) {
      await enter(page, `${limit} [data-key="${key}"]`, value);
    }
    await ask(page);
    const cards = await page.$$eval(".limit", (all) => all.map((card) => card.innerText));
    assert.equal(cards.length, 2);
    assert.match(cards[1], /^it's <b>full<\/b>\n+Passed already\n/);
    assert.match(cards[0], /81 of 160 nodes with 50 links or more today/i);
    // The what-ifs side by side, with the service's own numbers.
    const id = await page.$eval("#answer", (answer) => answer.dataset.run);
    const run = await service(base, "GET", `/v1/forecasts/${id}`);
    const table = await page.evaluate(() => {
      const found = [...document.querySelectorAll("#answer table")].find((one) => one.textContent.includes("as it stands"));
      return { caption: found.caption.textContent, rows: [...found.tBodies[0].rows].map((row) => [...row.cells].map((cell) => cell.textContent)) };
    });
    assert.match(table.caption, /^Nodes with at least 30 links expected by 1 August 2027$/);
    assert.deepEqual(table.rows.map((row) => row[0]), ["as it stands", "campaign", "followers capped"]);
    run.scenarios.forEach((scenario, i) => {
      const tail = scenario.dates.at(-1).tail.find((one) => one.threshold === 30);
      assert.equal(table.rows[i + 1][1], tail.scenario.toLocaleString("en-GB", { maximumFractionDigits: 0 }));
    });
    // A limit can be taken away again.
    await page.click(`${limit} .drop-row button`);
    await ask(page);
    assert.equal((await page.$$(".limit")).length, 1);
  }));

test("a reload keeps the work and makes no second run", () =>
  visit(async (page, asked) => {
    await loadDemo(page);
    const finding = await textOf(page, "#answer .finding");
    await page.reload();
    assert.equal(await textOf(page, "#answer .finding"), finding);
    assert.equal(posts(asked), 1);
    assert.equal(await page.$eval("#arrivals", (field) => field.value), "40");
    assert.equal((await page.$$('#limits [role="group"]')).length, 1);
    await enter(page, "#arrivals", "60");
    await ask(page);
    assert.notEqual(await textOf(page, "#answer .finding"), finding);
    await page.click("#empty");
    await page.waitForFunction(() => document.querySelector("#answer .welcome") && document.getElementById("paste").value === "", { polling: 50 });
  }));

test("what is seen can be taken along, and the curl line gives the same answer", () =>
  visit(async (page) => {
    await loadDemo(page);
    await enter(page, '#limits [data-key="name"]', "the planner's $(limit) `name` \"here\"");
    await ask(page);
    await chartsDrawn(page);
    const id = await page.$eval("#answer", (answer) => answer.dataset.run);
    const run = await service(base, "GET", `/v1/forecasts/${id}`);
    const folder = await mkdtemp(join(tmpdir(), "tailcast-taken-"));
    try {
      const session = await page.createCDPSession();
      await session.send("Browser.setDownloadBehavior", { behavior: "allow", downloadPath: folder, browserContextId: page.browserContext().id });
      for (const [words, name, inside] of [
        ["Table as CSV", "tailcast-forecast.csv", "date,threshold,now,expected"],
        ["Limits as CSV", "tailcast-limits.csv", "threshold"],
        ["What-ifs as CSV", "tailcast-scenarios.csv", "followers capped"],
        ["Growth as SVG", "tailcast-growth.svg", "<svg"],
        ["All degrees as SVG", "tailcast-tail.svg", "<svg"],
        ["What-ifs as SVG", "tailcast-scenarios.svg", "<svg"],
        ["Everything as JSON", "tailcast-forecast.json", run.inputs_digest],
      ]) {
        await page.evaluate((text) => [...document.querySelectorAll(".along a")].find((link) => link.textContent === text).click(), words);
        assert.ok((await downloaded(folder, name)).includes(inside), words);
      }
      const line = await page.$eval("#answer textarea.line", (field) => field.value);
      const { stdout } = await promisify(execFile)("bash", ["-c", line], { maxBuffer: 1e8, env: { ...process.env, no_proxy: "127.0.0.1" } });
      const again = JSON.parse(stdout);
      assert.notEqual(again.id, run.id);
      for (const part of ["inputs_digest", "fit", "forecast", "limits", "scenarios", "warnings"]) assert.deepEqual(again[part], run[part], part);
    } finally {
      await rm(folder, { recursive: true, force: true });
    }
    const report = await page.$eval(".along a:not([download])", (link) => link.href);
    const answer = await fetch(report);
    assert.match(answer.headers.get("content-type"), /^text\/html/);
  }));

// A download is done when it has its own name.
async function downloaded(folder, name) {
  for (let tried = 0; tried < 200; tried += 1) {
    if ((await readdir(folder)).includes(name)) return readFile(join(folder, name), "utf8");
    await new Promise((resolve) => setTimeout(resolve, 50));
  }
  throw new Error(`${name} was not downloaded`);
}

test("charts have a text alternative and follow the threshold", () =>
  visit(async (page) => {
    await loadDemo(page);
    const alternatives = () => page.$$eval("#answer figure.chart img", (all) => all.map((image) => image.alt));
    const before = await alternatives();
    assert.equal(before.length, 3, "growth, what-ifs, all degrees");
    for (const text of before) assert.ok(text.length > 40, text);
    await page.click('.choice input[value="10"]');
    await chartsDrawn(page);
    assert.notEqual((await alternatives())[0], before[0]);
  }));

test("a whole request is taken over, and so is a file", () =>
  visit(async (page) => {
    const request = JSON.parse(await example("debian-two-releases.json"));
    await page.evaluate((text) => {
      const data = new DataTransfer();
      data.items.add(new File([text], "request.json", { type: "application/json" }));
      document.getElementById("drop").dispatchEvent(new DragEvent("drop", { dataTransfer: data, bubbles: true, cancelable: true }));
    }, JSON.stringify(request));
    await page.waitForSelector("#answer .finding");
    assert.match(await textOf(page, "#paste-state"), /A whole request was read\. It goes on with .*snapshots/);
    const id = await page.$eval("#answer", (answer) => answer.dataset.run);
    const direct = await service(base, "POST", "/v1/forecasts", request);
    const run = await service(base, "GET", `/v1/forecasts/${id}`);
    assert.equal(run.inputs_digest, direct.inputs_digest);
  }));
