// Limits and what-ifs: the rows in which they are asked, and the bodies they become.

import { el, fill, freshId } from "./dom.mjs";

const NUMBER = { type: "number", step: "any", inputmode: "decimal" };
const WHOLE = { type: "number", min: "0", step: "1", inputmode: "numeric" };

/** What a limit is made of; keys are those of the service. */
export const LIMIT = [
  { key: "name", label: "Name", attributes: { type: "text", maxlength: "200", placeholder: "shards" } },
  { key: "threshold", label: "Hubs with at least … links", attributes: WHOLE },
  { key: "max_nodes", label: "At most … of them", attributes: WHOLE },
  { key: "by", label: "Until", attributes: { type: "date" } },
  { key: "risk", label: "Risk put up with, %", attributes: { ...NUMBER, min: "0", max: "100", placeholder: "5" } },
];

/** What a what-if is made of. */
export const SCENARIO = [
  { key: "name", label: "Name", attributes: { type: "text", maxlength: "200", placeholder: "campaign" } },
  { key: "arrivals_factor", label: "Arrivals, % more or less", attributes: { ...NUMBER, placeholder: "20" } },
  { key: "links_factor", label: "Links per new node, % more or less", attributes: { ...NUMBER, placeholder: "as it is" } },
  { key: "preferential_share", label: "Links that follow degree, %", attributes: { ...NUMBER, min: "0", max: "100", placeholder: "as it is" } },
  { key: "degree_cap", label: "No node beyond … links", attributes: { ...WHOLE, placeholder: "no cap" } },
];

/** The fields of one row, each with its label; `pointer` is where the row stands in the body. */
export function rowFields(kind, values = {}, pointer = "") {
  return kind.map(({ key, label, attributes }) => {
    const id = freshId(key);
    return el(
      "p",
      {},
      el("label", { for: id }, label),
      el("input", { id, "data-key": key, "data-pointer": `${pointer}/${key}`, autocomplete: "off", ...attributes, ".value": values[key] ?? "" }),
    );
  });
}

/** The values of a row's fields as they were typed. */
export function rowValues(row) {
  const values = {};
  for (const field of row.querySelectorAll("[data-key]")) values[field.dataset.key] = field.value.trim();
  return values;
}

/** A fieldset in which rows can be added and taken away; `set(rows)` shows rows, `get()` reads them. */
export function rowsIn(fieldset, { kind, noun, collection, fresh, onChange }) {
  const [box, add] = [fieldset.querySelector("div"), fieldset.querySelector("button")];
  const get = () => [...box.children].map((row) => ({ ...row.extra, ...rowValues(row) }));
  const set = (rows) => fill(box, rows.map(rowAt));
  function rowAt(values, i) {
    const row = el(
      "div",
      { class: "row", role: "group", "aria-label": `${noun} ${i + 1}` },
      rowFields(kind, values, `/${collection}/${i}`),
      el("p", { class: "drop-row" }, el("button", { type: "button", onclick: () => remove(i) }, `Take ${noun} ${i + 1} away`)),
    );
    // What a pasted request says beyond these fields stays with the row.
    row.extra = { extra: values.extra };
    return row;
  }
  function remove(i) {
    set(get().filter((_, at) => at !== i));
    add.focus();
    onChange();
  }
  add.addEventListener("click", () => {
    set([...get(), fresh()]);
    box.lastElementChild.querySelector("input").focus();
    onChange();
  });
  return { get, set };
}

/** A limit as the service takes it. */
export function limitBody({ name, threshold, max_nodes, by, risk, extra }) {
  return defined({
    ...extra,
    name: name || undefined,
    threshold: number(threshold),
    max_nodes: number(max_nodes),
    by: by || undefined,
    risk: risk ? tidy(Number(risk) / 100) : undefined,
  });
}

/** A what-if as the service takes it. */
export function scenarioBody({ name, arrivals_factor, links_factor, preferential_share, degree_cap, extra }) {
  return defined({
    ...extra,
    name: name || undefined,
    arrivals_factor: arrivals_factor ? tidy(1 + Number(arrivals_factor) / 100) : undefined,
    links_factor: links_factor ? tidy(1 + Number(links_factor) / 100) : undefined,
    preferential_share: preferential_share ? tidy(Number(preferential_share) / 100) : undefined,
    degree_cap: degree_cap ? { links: Number(degree_cap), refused: extra?.degree_cap?.refused ?? "spread" } : extra?.degree_cap,
  });
}

/** The row of a limit in a body. */
export function limitRow({ name, threshold, max_nodes, by, risk, ...rest }) {
  const text = (value) => (value === undefined ? "" : String(value));
  const percent = risk === undefined ? "" : String(tidy(100 * risk));
  return { name: name ?? "", threshold: text(threshold), max_nodes: text(max_nodes), by: dateOnly(by), risk: percent, extra: rest };
}

/** The row of a what-if in a body. */
export function scenarioRow({ name, arrivals_factor, links_factor, preferential_share, degree_cap, ...rest }) {
  const change = (factor) => (factor === undefined ? "" : String(tidy(100 * (factor - 1))));
  return {
    name: name ?? "",
    arrivals_factor: change(arrivals_factor),
    links_factor: change(links_factor),
    preferential_share: preferential_share === undefined ? "" : String(tidy(100 * preferential_share)),
    degree_cap: degree_cap === undefined ? "" : String(degree_cap.links),
    extra: degree_cap === undefined ? rest : { ...rest, degree_cap },
  };
}

/** What a what-if changes, in words. */
export function changeInWords(change) {
  const { arrivals_factor, links_factor, preferential_share, degree_cap, ...rest } = change;
  const times = (factor) => `${Math.abs(tidy(100 * (factor - 1)))} % ${factor < 1 ? "fewer" : "more"}`;
  const parts = [];
  if (arrivals_factor !== undefined) parts.push(`${times(arrivals_factor)} arrivals`);
  if (links_factor !== undefined) parts.push(`${times(links_factor)} links per new node`);
  if (preferential_share !== undefined) parts.push(`${tidy(100 * preferential_share)} % of links follow degree`);
  if (degree_cap !== undefined) parts.push(`no node beyond ${degree_cap.links} links`);
  for (const key of Object.keys(rest)) parts.push(`other ${key.replaceAll("_", " ")}`);
  return parts.length > 0 ? parts.join(", ") : "nothing";
}

// 100 * 0.07 is 7.000000000000001.
function tidy(value) {
  return Number(value.toPrecision(12));
}

// What is left empty is left out: the service then says which field is needed.
function number(text) {
  return text ? Number(text) : undefined;
}

function defined(object) {
  return Object.fromEntries(Object.entries(object).filter(([, value]) => value !== undefined));
}

function dateOnly(text) {
  return typeof text === "string" ? text.slice(0, 10) : "";
}
