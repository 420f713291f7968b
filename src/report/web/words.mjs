// Numbers, dates and findings in words.

import { today } from "./defaults.mjs";

const COUNT = new Intl.NumberFormat("en-GB", { maximumFractionDigits: 0 });
const FINE = new Intl.NumberFormat("en-GB", { maximumSignificantDigits: 3 });
const DATE = new Intl.DateTimeFormat("en-GB", { day: "numeric", month: "long", year: "numeric", timeZone: "UTC" });
const SHORT_DATE = new Intl.DateTimeFormat("en-GB", { day: "numeric", month: "short", year: "numeric", timeZone: "UTC" });

/** A number of nodes: whole from 10 on, with three digits below. */
export function count(value) {
  if (!Number.isFinite(value)) return "not known";
  return Math.abs(value) >= 10 || Number.isInteger(value) ? COUNT.format(value) : FINE.format(value);
}

/** A share as per cent. */
export function percent(share) {
  const value = 100 * share;
  if (value > 0 && value < 0.1) return "under 0.1 %";
  if (value > 99.9 && value < 100) return "over 99.9 %";
  return `${FINE.format(value)} %`;
}

/** An interval of counts, by one node only when it is one. */
export function range(interval) {
  return interval.low === interval.high ? count(interval.low) : `${count(interval.low)} to ${count(interval.high)}`;
}

/** A date in full; with its time where that is not midnight. */
export function day(text, short = false) {
  const date = new Date(/T/.test(text) ? text : `${text}T00:00:00Z`);
  if (Number.isNaN(date.getTime())) return text;
  const midnight = date.getTime() % 86_400_000 === 0;
  const words = (short ? SHORT_DATE : DATE).format(date);
  return midnight ? words : `${words}, ${date.toISOString().slice(11, 16)} UTC`;
}

/** When something happened, to the minute and in UTC, as everything else here. */
export function moment(text) {
  const date = new Date(text);
  return Number.isNaN(date.getTime()) ? text : `${SHORT_DATE.format(date)}, ${date.toISOString().slice(11, 16)} UTC`;
}

/** The widest interval of an answer. */
export function widest(intervals) {
  return intervals.reduce((best, one) => (best === null || one.level > best.level ? one : best), null);
}

/** The row of a threshold at a date of a forecast. */
export function tailAt(date, threshold) {
  return date.tail.find((tail) => tail.threshold === threshold);
}

function counted(asOf) {
  if (!asOf) return "at the last count";
  return asOf === today() ? "today" : `on ${day(asOf)}`;
}

function span(interval) {
  return interval.low === interval.high ? "just that" : `between ${count(interval.low)} and ${count(interval.high)}`;
}

/** What a forecast finds for a threshold at its last date, as a sentence; the counts are those of the day `asOf`. */
export function finding(answer, threshold, asOf) {
  const last = answer.forecast[answer.forecast.length - 1];
  const tail = last && tailAt(last, threshold);
  if (!tail) return "There is no date to speak of.";
  const interval = widest(tail.intervals);
  const probable = interval ? `, with ${percent(interval.level)} probability ${span(interval)}` : "";
  const links = threshold === 1 ? "1 link" : `${count(threshold)} links`;
  return `${count(tail.now)} ${tail.now === 1 ? "node" : "nodes"} with at least ${links} ${counted(asOf)}; ` +
    `${count(tail.median)} by ${day(last.date)}${probable}.`;
}

/** First letter large. */
export function sentence(text) {
  const full = /[.!?]$/.test(text) ? text : `${text}.`;
  return full.charAt(0).toUpperCase() + full.slice(1);
}
