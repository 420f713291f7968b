// What is pasted and entered, read by the page's own modules, without a browser.

import assert from "node:assert/strict";
import test from "node:test";
import { pickThresholds, yearAfter } from "../../src/report/web/defaults.mjs";
import { readPaste } from "../../src/report/web/paste.mjs";
import { curlLine } from "../../src/report/web/reproduce.mjs";
import { forecastBody, fromBody, readThresholds } from "../../src/report/web/request.mjs";
import { example } from "./harness.mjs";

const COUNTS = [[0, 6387], [1, 2236], [12, 1035]];

for (const [name, text] of [
  ["CSV with a header (RFC 4180)", "degree,nodes\r\n0,6387\r\n1,2236\r\n12,1035\r\n"],
  ["CSV without", "0,6387\n1,2236\n12,1035"],
  ["CSV with quoted thousands", 'degree,nodes\n0,"6,387"\n1,"2,236"\n12,"1,035"'],
  ["spreadsheet columns", "0\t6387\n1\t2236\n12\t1035\n"],
  ["spreadsheet columns, English thousands", "Degree\tNodes\n0\t6,387\n1\t2,236\n12\t1,035\n"],
  ["spreadsheet columns, German thousands", "0\t6.387\n1\t2.236\n12\t1.035\n"],
  ["spreadsheet columns, French thousands", "0\t6\u202f387\n1\t2\u00a0236\n12\t1 035\n"],
  ["spreadsheet columns, Swiss thousands", "0\t6’387\n1\t2'236\n12\t1'035\n"],
  ["semicolons and decimal commas", "Grad;Knoten\n0,0;6387,0\n1,0;2236,0\n12,0;1035,0\n"],
  ["semicolons, thousands and decimals at once", "0;6.387,00\n1;2.236,00\n12;1.035,00\n"],
  ["floats as programs write them", "0.0,6387.0\n1.0,2236.0\n12.0,1035.0"],
  ["decimals throughout", "0.000;6387.00\n1.000;2236.00\n12.000;1035.00"],
  ["columns the other way round, by their names", "nodes,degree\n6387,0\n2236,1\n1035,12"],
  ["columns among others, by their names", "day;degree;nodes\n1;0;6387\n1;1;2236\n1;12;1035"],
  ["a table drawn with bars", "| degree | nodes |\n| 0 | 6387 |\n| 1 | 2236 |\n| 12 | 1035 |"],
  ["spaces, blank lines, any order, a byte order mark", "\ufeff12   1035\n\n0 6387\n  1 2236  \n"],
  ["JSON pairs", "[[12, 1035], [0, 6387], [1, 2236]]"],
  ["a JSON snapshot", '{"as_of": "2026-06-01", "degree_counts": [[0, 6387], [1, 2236], [12, 1035]]}'],
]) {
  test(`counts are read from ${name}`, () => {
    const read = readPaste(text);
    assert.deepEqual(read.faults, []);
    assert.deepEqual(read.counts, COUNTS);
  });
}

for (const [name, text, place, words] of [
  ["nothing", " \n ", {}, /nothing in it/],
  ["a word", "0,5\n1,many\n2,3", { line: 2 }, /“many” is not a number/],
  ["what may be thousands or decimals", "1.000\t3\n2.000\t4\n5.000\t1", { line: 1 }, /two ways/],
  ["a fraction", "0;5\n1;2,5\n2;3", { line: 2 }, /“2,5” is not a whole number/],
  ["a negative number", "0,5\n1,-3", { line: 2 }, /“-3” is negative/],
  ["a missing number", "0\t5\n1\t\n2\t3", { line: 2 }, /number of nodes is empty/],
  ["one column", "5\n3\n1", { line: 1 }, /one column; two are needed/],
  ["unquoted thousands in CSV", "degree,nodes\n0,6,387\n1,2", { line: 2 }, /3 columns; put numbers with commas in them in quotes/],
  ["a degree twice", "0,5\n1,3\n0,2", { line: 3 }, /degree 0 comes twice, in lines 1 and 3; add their nodes up/],
  ["no node at all", "0,0\n1,0", {}, /every number of nodes is 0/],
  ["a number beyond what is exact", "0,5\n1,9007199254740993", { line: 2 }, /larger than 9007199254740991/],
  ["JSON that ends early", "[[0, 5], [1,", {}, /ends too early/],
  ["JSON pairs of three", "[[0, 5], [1, 2, 3]]", { row: 2 }, /no pair/],
  ["JSON with texts", '[[0, 5], [1, "2"]]', { row: 2 }, /not two whole numbers/],
  ["other JSON", '{"a": 1}', {}, /no “snapshots” and no “degree_counts”/],
  ["a script", "<script>alert(1)</script>\n<b>,</b>", { line: 1 }, /one column/],
]) {
  test(`${name} is refused with its place`, () => {
    const { counts, faults } = readPaste(text);
    assert.ok(faults.length > 0 && (text.includes("0,5") || counts.length < 4), JSON.stringify(faults));
    assert.match(faults[0].detail, words);
    assert.equal(faults[0].line, place.line);
    assert.equal(faults[0].row, place.row);
  });
}

test("of many faults the first are told and the others counted", () => {
  const { faults, more } = readPaste("0,5\n" + "x,y1\n".repeat(1000));
  assert.equal(faults.length + more, 1000);
  assert.ok(faults.length < 20);
});

test("a whole request fills the form and loses nothing", async () => {
  for (const name of ["minimal.json", "debian-transitions.json", "debian-planning.json"]) {
    const request = JSON.parse(await example(name));
    const read = readPaste(JSON.stringify(request));
    assert.deepEqual(read.faults, []);
    const { entered, base } = fromBody(read.body);
    const { body, faults } = forecastBody(entered, { counts: read.counts, base }, []);
    assert.deepEqual(faults, []);
    const days = (value) => JSON.parse(JSON.stringify(value).replaceAll("T00:00:00Z", ""));
    for (const snapshot of request.snapshots) snapshot.degree_counts.sort((a, b) => a[0] - b[0]);
    for (const snapshot of body.snapshots) snapshot.degree_counts.sort((a, b) => a[0] - b[0]);
    assert.deepEqual(days(body), days({ ...request, thresholds: [...request.thresholds].sort((a, b) => a - b) }), name);
  }
});

test("what a request lacks is said before it is sent", () => {
  const entered = { kind: "received", asOf: "", arrivals: "", growth: "", links: "", thresholds: "1,000", until: "", every: "P1M", limits: [], scenarios: [] };
  const { faults } = forecastBody(entered, { counts: COUNTS }, [10]);
  assert.deepEqual(faults.map((fault) => fault.pointer), ["/thresholds", "/snapshots/0/as_of", "/arrivals/per_day"]);
});

test("thresholds are read in any order, and refused where they can be read in two ways", () => {
  assert.deepEqual(readThresholds("100; 10, 1000 12").thresholds, [10, 12, 100, 1000]);
  assert.match(readThresholds("1 000").fault, /two ways/);
  assert.deepEqual(readThresholds("").thresholds, []);
  assert.match(readThresholds("1,000").fault, /two ways/);
  assert.match(readThresholds("ten").fault, /“ten” is not a whole number/);
});

test("thresholds are picked where there are hubs, but not too few", () => {
  assert.deepEqual(pickThresholds([[0, 900], [1, 60], [12, 30], [40, 8], [700, 2]]), [1, 2, 5, 10, 20]);
  assert.deepEqual(pickThresholds([[0, 10], [3, 1]]), [3]);
  assert.deepEqual(pickThresholds([[0, 10]]), [1]);
});

test("a year after a leap day is the last of February", () => {
  assert.equal(yearAfter("2028-02-29"), "2029-02-28");
  assert.equal(yearAfter("2026-08-01"), "2027-08-01");
});

test("a body too long for a command line is read from a file", () => {
  const call = { method: "POST", path: "/v1/forecasts", body: `{"label": "it's"}` };
  assert.equal(curlLine("http://h", call).line, `curl -s 'http://h/v1/forecasts' -H 'Content-Type: application/json' --data-binary '{"label": "it'\\''s"}'`);
  const long = curlLine("http://h", { ...call, body: "x".repeat(200_000) });
  assert.ok(long.inFile && long.line.endsWith("--data-binary @tailcast-request.json"));
});
