// Problems in words: what is wrong, where, and what to do.

import { el, fill } from "./dom.mjs";

/** Faults that are told one by one. */
const TOLD = 10;

const TITLES = {
  0: "The service cannot be reached",
  400: "Something in the request is wrong",
  401: "The service asks for an access key",
  403: "The access key does not allow this",
  404: "There is no such thing here",
  408: "The request came too slowly",
  409: "This contradicts what is stored",
  412: "Somebody changed it meanwhile",
  413: "That is more than is taken at once",
  422: "No forecast follows from this",
  429: "The access key has asked too often",
  500: "The service has a fault",
  503: "The service is busy",
};

/**
 * Shows a problem. `fieldOf(pointer)` finds the field that a pointer into the body means, `placeOf(pointer)` names a
 * place without a field of its own; `retry` is offered where trying again may help.
 */
export function showProblem(box, problem, { fieldOf = () => null, placeOf = () => null, retry } = {}) {
  const faults = problem.faults.slice(0, TOLD).map((fault) => el("li", {}, faultPlace(fault, fieldOf, placeOf), fault.detail));
  const more = problem.faults.length - faults.length;
  fill(
    box,
    el(
      "div",
      { class: "problem", role: "alert" },
      el("h3", {}, TITLES[problem.status] ?? problem.title),
      el("p", {}, problem.detail),
      faults.length > 0 && el("ul", {}, faults),
      more > 0 && el("p", {}, `and ${more} more.`),
      retry && problem.passing && el("p", {}, el("button", { type: "button", onclick: retry }, "Try again")),
      problem.status >= 500 && problem.requestId && el("p", { class: "help" }, `Request ${problem.requestId}, as in the service's log.`),
    ),
  );
}

// The place as a link that leads to its field, or in words.
function faultPlace(fault, fieldOf, placeOf) {
  const missing = /^the field "(\w+)" is missing/.exec(fault.detail);
  const pointer = (fault.pointer ?? "") + (missing ? `/${missing[1]}` : "");
  const words = placeOf(pointer);
  const field = fieldOf(pointer);
  if (field) {
    field.setAttribute("aria-invalid", "true");
    const go = () => field.focus();
    return [el("button", { type: "button", class: "place", onclick: go }, words ?? labelOf(field)), ": "];
  }
  const place = words ?? fault.parameter ?? fault.header ?? pointer;
  return place === "" ? "" : `${place}: `;
}

/** What a field is called on the page. */
export function labelOf(field) {
  return field.labels?.[0]?.textContent.trim() ?? field.getAttribute("aria-label") ?? field.id;
}

/** Takes a problem away, and the marks it left on fields. */
export function clearProblem(box, form) {
  fill(box);
  for (const field of form?.querySelectorAll("[aria-invalid]") ?? []) field.removeAttribute("aria-invalid");
}

/** The field whose pointer is the longest beginning of this one. */
export function fieldFinder(form) {
  return (pointer) => {
    let best = null;
    for (const field of form.querySelectorAll("[data-pointer]")) {
      const own = field.dataset.pointer;
      const leads = pointer === own || pointer.startsWith(`${own}/`);
      if (leads && (best === null || own.length > best.dataset.pointer.length)) best = field;
    }
    return best;
  };
}
