// Degree counts from whatever was pasted: CSV, spreadsheet columns or JSON. Pure: no page is needed to test it.

import { columnStyle, readWhole } from "./numbers.mjs";

/** Most faults that are told one by one. */
const TOLD = 8;
/** Longest piece of a text that is quoted back. */
const QUOTED = 40;
/** Lines by which the separator of columns is judged. */
const LOOKED_AT = 50;

const DEGREE_NAMES = /^(degrees?|links?|in.?degree|followers?|dependents?|peers?|k)$/i;
const NODES_NAMES = /^(nodes?|counts?|number|n|accounts?|packages?|hosts?|users?|members?|count\(\*\))$/i;

/**
 * Reads a text. Answers `{counts, lines, notes, faults, more, body}`: `[degree, nodes]` pairs in rising order, the line
 * of each, what was taken for granted, the first faults with their lines, how many more there are, and, when a whole
 * request was pasted, that request.
 */
export function readPaste(text) {
  const clean = text.replace(/^\ufeff/, "");
  if (clean.trim() === "") return refused({ detail: "There is nothing in it; paste two columns, degree and nodes." });
  if (/^\s*[[{]/.test(clean)) return readJson(clean);
  return finished(readColumns(clean));
}

function refused(fault) {
  return { counts: [], lines: [], notes: [], faults: [fault], more: 0 };
}

function quoted(text) {
  const short = text.length > QUOTED ? `${text.slice(0, QUOTED)}…` : text;
  return `“${short.trim()}”`;
}

// Faults beyond those told are counted only: a million of them must not take memory.
function collector() {
  const faults = [];
  let more = 0;
  return {
    add(fault) {
      if (faults.length < TOLD) faults.push(fault);
      else more += 1;
    },
    result: () => ({ faults, more }),
  };
}

function readColumns(text) {
  const lines = (text.includes("\r") ? text.replace(/\r\n?/g, "\n") : text).split("\n");
  const filled = lines.filter((line) => line.trim() !== "");
  const separator = separatorOf(filled.slice(0, LOOKED_AT));
  const rows = [];
  lines.forEach((line, i) => {
    if (line.trim() !== "") rows.push({ line: i + 1, text: line, cells: cellsOf(line, separator) });
  });
  const notes = [];
  const columns = columnsOf(rows, notes);
  const told = collector();
  const pairs = [];
  const lineOf = [];
  const picked = rows.filter((row) => row.cells.length >= columns.least);
  const styles = [columns.degree, columns.nodes].map((column) => columnStyle(picked.map((row) => row.cells[column])));
  let grouped = null;
  for (const row of rows) {
    if (row.cells.length < columns.least || row.cells.length > columns.most) {
      told.add({ line: row.line, detail: shapeFault(row, separator) });
      continue;
    }
    const read = [columns.degree, columns.nodes].map((column, i) => readWhole(row.cells[column], styles[i]));
    const wrong = read.findIndex((cell) => cell.fault);
    if (wrong >= 0) {
      const cell = row.cells[wrong === 0 ? columns.degree : columns.nodes];
      const name = wrong === 0 ? "degree" : "number of nodes";
      told.add({ line: row.line, detail: `The ${name} ${cell.trim() === "" ? "" : `${quoted(cell)} `}${read[wrong].fault}.` });
      continue;
    }
    const separated = read.findIndex((cell) => cell.grouped);
    if (separated >= 0 && grouped === null) {
      grouped = `${quoted(row.cells[separated === 0 ? columns.degree : columns.nodes])} was read as ${read[separated].value}.`;
    }
    pairs.push([read[0].value, read[1].value]);
    lineOf.push(row.line);
  }
  if (grouped) notes.push(grouped);
  return { pairs, lineOf, notes, told };
}

function separatorOf(lines) {
  const share = (mark) => lines.filter((line) => line.includes(mark)).length;
  for (const mark of ["\t", ";", "|"]) {
    if (share(mark) * 2 > lines.length) return mark;
  }
  return share(",") * 2 > lines.length ? "," : " ";
}

function cellsOf(line, separator) {
  if (separator === " ") return line.trim().split(/\s+/);
  const cells = line.includes('"') ? quotedCells(line, separator) : line.split(separator);
  // Spreadsheets and tables drawn with bars leave empty columns at the edges.
  while (cells.length > 2 && cells[cells.length - 1].trim() === "") cells.pop();
  while (cells.length > 2 && cells[0].trim() === "") cells.shift();
  return cells;
}

// RFC 4180 on one line.
function quotedCells(line, separator) {
  const cells = [];
  let cell = "";
  let within = false;
  for (let i = 0; i < line.length; i += 1) {
    const c = line[i];
    if (c === '"' && within && line[i + 1] === '"') {
      cell += c;
      i += 1;
    } else if (c === '"') within = !within;
    else if (c === separator && !within) {
      cells.push(cell);
      cell = "";
    } else cell += c;
  }
  cells.push(cell);
  return cells;
}

// Takes the header off the rows where there is one, and says which columns are meant.
function columnsOf(rows, notes) {
  const first = rows[0]?.cells.map((cell) => cell.trim()) ?? [];
  if (first.some((cell) => /\d/.test(cell) && !/[a-z]/i.test(cell)) || first.length < 2) {
    return { degree: 0, nodes: 1, least: 2, most: 2 };
  }
  const degree = first.findIndex((cell) => DEGREE_NAMES.test(cell));
  const nodes = first.findIndex((cell) => NODES_NAMES.test(cell));
  rows.shift();
  if (degree >= 0 && nodes >= 0) {
    if (degree > nodes) notes.push(`Columns by their names: ${first[degree]} is the degree, ${first[nodes]} the number of nodes.`);
    return { degree, nodes, least: Math.max(degree, nodes) + 1, most: first.length };
  }
  notes.push(`The first line, ${quoted(first.join(", "))}, was taken for a header.`);
  return { degree: 0, nodes: 1, least: 2, most: 2 };
}

function shapeFault(row, separator) {
  if (row.cells.length < 2) return `${quoted(row.text)} has one column; two are needed, degree and number of nodes.`;
  const advice = separator === ","
    ? "put numbers with commas in them in quotes, or copy the two columns straight from the spreadsheet"
    : "copy the columns degree and number of nodes alone, or name them in a first line: degree, nodes";
  return `${quoted(row.text)} has ${row.cells.length} columns; ${advice}.`;
}

function readJson(text) {
  let value;
  try {
    value = JSON.parse(text);
  } catch (error) {
    return refused(jsonFault(text, error));
  }
  if (Array.isArray(value)) return finished(readPairs(value));
  if (Array.isArray(value.degree_counts)) {
    const result = finished(readPairs(value.degree_counts));
    return { ...result, asOf: typeof value.as_of === "string" ? value.as_of : undefined };
  }
  if (!Array.isArray(value.snapshots) || value.snapshots.length === 0) {
    return refused({ detail: "This JSON has no “snapshots” and no “degree_counts”; paste a list of [degree, nodes] pairs or a whole request." });
  }
  const newest = value.snapshots[value.snapshots.length - 1];
  const result = finished(readPairs(Array.isArray(newest?.degree_counts) ? newest.degree_counts : []));
  return result.faults.length > 0 ? result : { ...result, body: value, asOf: newest.as_of };
}

function jsonFault(text, error) {
  const position = /position (\d+)/.exec(error.message);
  const at = position ? Number(position[1]) : null;
  const line = at === null ? undefined : text.slice(0, at).split("\n").length;
  const token = /token '?(.)/.exec(error.message);
  let found = "it ends too early";
  if (at !== null && at < text.length) found = `it breaks off at ${quoted(text.slice(at, at + 20))}`;
  else if (at === null && token) found = `${quoted(token[1])} stands where it may not`;
  return { line, detail: `This begins like JSON, but ${found}.` };
}

function readPairs(list) {
  const told = collector();
  const pairs = [];
  const lineOf = [];
  list.forEach((pair, i) => {
    const row = i + 1;
    if (!Array.isArray(pair) || pair.length !== 2) {
      told.add({ row, detail: `${quoted(JSON.stringify(pair) ?? "")} is no pair; write [degree, nodes].` });
    } else if (!pair.every((n) => Number.isSafeInteger(n) && n >= 0)) {
      told.add({ row, detail: `${quoted(JSON.stringify(pair))} is not two whole numbers from 0; counts have no signs, fractions or quotes.` });
    } else {
      pairs.push(pair);
      lineOf.push(row);
    }
  });
  return { pairs, lineOf, notes: [], told, byRow: true };
}

// What only the whole can show: degrees that come twice, nothing counted at all. In rising order.
function finished({ pairs, lineOf, notes, told, byRow }) {
  const order = pairs.map((_, i) => i).sort((a, b) => pairs[a][0] - pairs[b][0] || a - b);
  const place = byRow ? "rows" : "lines";
  for (let i = 1; i < order.length; i += 1) {
    const [before, here] = [order[i - 1], order[i]];
    if (pairs[before][0] === pairs[here][0]) {
      told.add({
        [byRow ? "row" : "line"]: lineOf[here],
        detail: `The degree ${pairs[here][0]} comes twice, in ${place} ${lineOf[before]} and ${lineOf[here]}; add their nodes up.`,
      });
    }
  }
  const { faults, more } = told.result();
  const nodes = pairs.reduce((sum, pair) => sum + pair[1], 0);
  if (faults.length === 0 && nodes === 0) faults.push({ detail: "No node is counted: every number of nodes is 0." });
  return { counts: order.map((i) => pairs[i]), lines: order.map((i) => lineOf[i]), notes, faults, more };
}
