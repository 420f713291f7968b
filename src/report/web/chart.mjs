// Charts that the service draws, each with its finding as caption and its description as text alternative.

import { el, fill } from "./dom.mjs";
import { call } from "./http.mjs";

const DARK = matchMedia("(prefers-color-scheme: dark)");

/** Where a chart of a run is. */
export function chartPath(run, chart, threshold) {
  const query = new URLSearchParams({ format: "svg", chart, theme: DARK.matches ? "dark" : "light" });
  if (threshold !== undefined) query.set("threshold", threshold);
  return `/v1/forecasts/${encodeURIComponent(run.id)}?${query}`;
}

/** A figure that fills itself; it stays out of the page when there is nothing to draw. */
export function chartFigure(run, chart, threshold) {
  const figure = el("figure", { class: "chart", hidden: true });
  draw(figure, run, chart, threshold);
  const redraw = () => (figure.isConnected ? draw(figure, run, chart, threshold) : DARK.removeEventListener("change", redraw));
  DARK.addEventListener("change", redraw);
  return figure;
}

async function draw(figure, run, chart, threshold) {
  let svg;
  try {
    svg = (await call(chartPath(run, chart, threshold))).data;
  } catch (problem) {
    // Tables say the same; a chart that the service does not have is no problem of the reader's.
    figure.hidden = problem.status !== 0 && problem.status < 500;
    fill(figure, el("p", { class: "help" }, `The chart could not be drawn: ${problem.detail}`));
    return;
  }
  const text = (name) => plainText(new RegExp(`<${name}[^>]*>([^<]*)</${name}>`).exec(svg)?.[1] ?? "");
  const address = URL.createObjectURL(new Blob([svg], { type: "image/svg+xml" }));
  // As a picture the drawing can run nothing, whatever is in it.
  const image = el("img", { src: address, alt: text("desc") || text("title"), onload: () => URL.revokeObjectURL(address) });
  const [, , width, height] = (/viewBox="([^"]*)"/.exec(svg)?.[1] ?? "").split(/[\s,]+/).map(Number);
  if (width > 0 && height > 0) {
    image.width = width;
    image.height = height;
  }
  fill(figure, el("div", { class: "picture", tabindex: "0", role: "group", "aria-label": text("title") }, image));
  figure.hidden = false;
}

// Parsed into a document, the drawing's styles would come under this page's policy, which refuses them.
function plainText(markup) {
  const named = { amp: "&", lt: "<", gt: ">", quot: '"', apos: "'" };
  return markup.replace(/&(?:#(\d+)|(\w+));/g, (all, code, name) => (code ? String.fromCodePoint(code) : named[name] ?? all)).trim();
}
