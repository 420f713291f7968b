// Networks that are kept: their limits in words, one of them opened, work watched and called off.

import assert from "node:assert/strict";
import test, { after, before } from "node:test";
import { enter, example, openPage, service, startBrowser, startService, textLike, textOf } from "./harness.mjs";

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

async function visit(steps, options) {
  const visit = await openPage(browser, base, options);
  try {
    await steps(visit.page, visit.asked);
  } finally {
    await visit.close();
  }
}

/** A network with a plan, a limit, a what-if and some months of counts, its forecast made. */
async function keepNetwork(name, months) {
  const path = `/v1/networks/${name}`;
  await service(base, "PUT", path, {
    degree_kind: "received",
    description: "Accounts of Heronsgate",
    forecast_plan: { thresholds: [5, 10, 20, 50], horizon: { ends_after: "P6M", every: "P1M" }, arrivals: { per_day: 40 } },
  });
  await service(base, "PUT", `${path}/limits/pools`, { threshold: 50, max_nodes: 110, by: "2027-01-01", risk: 0.05 });
  await service(base, "PUT", `${path}/scenarios/campaign`, { arrivals_factor: 1.5 });
  for (const month of months) {
    await service(base, "PUT", `${path}/snapshots/2026-${month}-01`, await example(`heronsgate/2026-${month}-01.csv`), "text/csv");
  }
  for (let tried = 0; tried < 600; tried += 1) {
    const { refresh } = (await service(base, "GET", "/v1/networks")).items.find((one) => one.name === name);
    if (refresh?.state === "current") return path;
    await new Promise((resolve) => setTimeout(resolve, 100));
  }
  throw new Error("the network's forecast was not made");
}

test("without a network the list says how to keep one", () =>
  visit(
    async (page) => {
      assert.match(await textOf(page, "#view-networks .welcome"), /No network is kept here yet/);
      assert.match(await textOf(page, "#view-networks pre"), new RegExp(`${base}/v1/networks/heronsgate`));
    },
    { hash: "#networks" },
  ));

test("a network is listed with its limits in words, and opened", async () => {
  const path = await keepNetwork("heronsgate", ["06", "07", "08"]);
  const kept = (await service(base, "GET", `${path}/limits`)).items[0];
  const latest = await service(base, "GET", `${path}/forecasts/latest`);
  const accuracy = await service(base, "GET", `${path}/accuracy`);
  await visit(
    async (page) => {
      const card = await textLike(page, "#view-networks .card", /probability/);
      assert.match(card, /^heronsgate/);
      assert.match(card, /3 snapshots, the newest of 1 August 2026\./);
      assert.match(card, /The forecast stands on all that is stored\./);
      const verdict = kept.verdict.replace("pools: ", "");
      assert.ok(card.includes(verdict.slice(1)), `${card}\n${verdict}`);
      await page.click("#view-networks .card a");
      const finding = await textOf(page, "#view-network .finding");
      const tail = latest.forecast.at(-1).tail.at(-1);
      assert.match(finding, new RegExp(`^${tail.now} nodes with at least 50 links on 1 August 2026; ${Math.round(tail.median)} by 1 February 2027`));
      assert.match(await textOf(page, "#view-network .limit"), /^pools/);
      const all = await textLike(page, "#view-network", /50 % more arrivals.*as it stands/s);
      assert.ok(all.includes(accuracy.verdict), accuracy.verdict);
      assert.equal(await page.title(), "heronsgate · tailcast");
      await page.goBack();
      await page.waitForSelector("#view-networks:not([hidden]) .card");
    },
    { hash: "#networks" },
  );
});

test("limits and what-ifs are kept and taken away, and the forecast follows", async () => {
  const path = await keepNetwork("followed", ["07", "08"]);
  await visit(
    async (page) => {
      await page.waitForSelector("#view-network .finding");
      const add = async (noun, values) => {
        await page.evaluate((words) => [...document.querySelectorAll("#view-network summary")].find((one) => one.textContent === words).click(), `Add a ${noun}`);
        for (const [key, value] of Object.entries(values)) await enter(page, `#view-network details[open] [data-key="${key}"]`, value);
        await page.click("#view-network details[open] button[type=submit]");
      };
      await add("limit", { name: "shards", threshold: "20", max_nodes: "300", by: "2027-01-01", risk: "10" });
      await textLike(page, "#view-network .kept", /shards/);
      // The refresh that follows is seen without a reload: a second card among the limits of the latest forecast.
      await page.waitForFunction(() => [...document.querySelectorAll("#view-network .limit h4")].some((one) => one.textContent === "shards"), { polling: 100 });
      const stored = await service(base, "GET", `${path}/limits/shards`);
      assert.deepEqual([stored.threshold, stored.max_nodes, stored.risk], [20, 300, 0.1]);
      await page.evaluate(() => document.querySelector('[aria-label="Take away limit shards"]').click());
      await page.waitForFunction(() => !document.querySelector('[aria-label="Take away limit shards"]'), { polling: 50 });
      assert.equal((await service(base, "GET", `${path}/limits`)).items.length, 1);
    },
    { hash: "#network/followed" },
  );
});

test("a kept network answers other questions", async () => {
  await keepNetwork("asked", ["07", "08"]);
  await visit(
    async (page) => {
      await page.waitForSelector("#view-network .other form");
      await enter(page, '.other [data-pointer="/thresholds"]', "15, 40");
      await enter(page, '.other [data-pointer="/horizon/until"]', "2028-08-01");
      await page.select('.other [data-pointer="/horizon/every"]', "P1Y");
      await enter(page, '.other [data-pointer="/arrivals/per_day"]', "80");
      await page.click(".other form button[type=submit]");
      assert.match(await textOf(page, ".other .finding"), /with at least (15|40) links on 1 August 2026; [\d,]+ by 1 August 2028/);
      const line = await page.$eval(".other textarea.line", (field) => field.value);
      assert.match(line, /networks\/asked\/forecasts' .*"thresholds":\[15,40\],"horizon":\{"until":"2028-08-01","every":"P1Y"\},"arrivals":\{"per_day":80\}/);
    },
    { hash: "#network/asked" },
  );
});

test("work is watched and can be called off", async () => {
  await keepNetwork("busy", ["01", "02", "03", "04", "05", "06", "07", "08"]);
  await visit(
    async (page) => {
      await page.waitForSelector("#view-network .finding");
      const button = (words) => page.evaluate((text) => [...document.querySelectorAll("#view-network button")].find((one) => one.textContent === text)?.click(), words);
      await button("Replay forecasts of the past");
      await page.waitForFunction(() => document.querySelector("#view-network .jobs progress"), { polling: 20 });
      await button("Call it off");
      await textLike(page, "#view-network .jobs", /Replaying past forecasts, called off/);
      assert.equal(await page.$("#view-network .jobs progress"), null);
      await button("Replay forecasts of the past");
      await textLike(page, "#view-network .jobs", /Replaying past forecasts, done on/);
      const { items } = await service(base, "GET", "/v1/networks/busy/backtests");
      const { verdict } = await service(base, "GET", `/v1/backtests/${items[0].id}`);
      await page.waitForFunction((words) => document.getElementById("view-network").textContent.includes(words), { polling: 50 }, verdict);
    },
    { hash: "#network/busy" },
  );
});

test("a network that is not kept is said so", () =>
  visit(
    async (page) => {
      assert.match(await textOf(page, "#view-network .problem"), /There is no such thing here/);
    },
    { hash: "#network/nobody", refusals: true },
  ));
