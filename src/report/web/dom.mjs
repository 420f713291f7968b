// Building the page. Everything that came from elsewhere enters as text, never as markup.

/** An element: attributes, `on…` listeners, properties after a dot; children are nodes or text. */
export function el(name, attributes = {}, ...children) {
  const node = document.createElement(name);
  for (const [key, value] of Object.entries(attributes)) {
    if (value === undefined || value === null || value === false) continue;
    if (key.startsWith("on")) node.addEventListener(key.slice(2), value);
    else if (key.startsWith(".")) node[key.slice(1)] = value;
    else node.setAttribute(key, value === true ? "" : String(value));
  }
  node.append(...children.flat(Infinity).filter((child) => child !== null && child !== undefined && child !== false));
  return node;
}

/** Puts other children into an element. */
export function fill(node, ...children) {
  node.replaceChildren(...children.flat(Infinity).filter((child) => child !== null && child !== undefined && child !== false));
  return node;
}

/** Whether the browser could read every number in a form; the first that it could not is shown, with the browser's own words. */
export function readable(form) {
  const wrong = [...form.querySelectorAll("input")].find((input) => input.validity.badInput);
  wrong?.reportValidity();
  return wrong === undefined;
}

/** The element of an id; the page has it. */
export function byId(id) {
  return document.getElementById(id);
}

let serial = 0;

/** An id that nothing else has. */
export function freshId(stem) {
  serial += 1;
  return `${stem}-${serial}`;
}

/** Tells readers of the screen what has changed. The same words twice are told twice. */
export function announce(text) {
  const region = byId("announcement");
  region.textContent = "";
  requestAnimationFrame(() => {
    region.textContent = text;
  });
}

/** Text that can be read later under a name. */
export function keep(name, value) {
  try {
    sessionStorage.setItem(name, JSON.stringify(value));
  } catch {
    // Full, or switched off: the work is then lost on reload, and nothing else.
    try {
      sessionStorage.removeItem(name);
    } catch {
      // Switched off.
    }
  }
}

/** What was kept under a name, or nothing. */
export function kept(name) {
  try {
    return JSON.parse(sessionStorage.getItem(name) ?? "null");
  } catch {
    return null;
  }
}
