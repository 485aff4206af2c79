// Elements without a framework. Text is always set as text, so that names from a site file stay names.

const SVG = "http://www.w3.org/2000/svg";

function fill(node, attributes, children) {
  for (const [name, value] of Object.entries(attributes ?? {})) {
    if (value === undefined || value === null || value === false) continue;
    if (name.startsWith("on")) node.addEventListener(name.slice(2), value);
    else if (name === "style") for (const [k, v] of Object.entries(value)) node.style.setProperty(k, v);
    else node.setAttribute(name, value === true ? "" : value);
  }
  node.append(...children.flat(3).filter((c) => c !== null && c !== undefined && c !== false));
  return node;
}

export const h = (tag, attributes, ...children) => fill(document.createElement(tag), attributes, children);
export const s = (tag, attributes, ...children) => fill(document.createElementNS(SVG, tag), attributes, children);
export const $ = (id) => document.getElementById(id);

/// Puts new content in, and the focus back where it was: elements that may hold it carry a `data-k`.
export function put(place, ...children) {
  const held = place.contains(document.activeElement) ? document.activeElement.dataset.k : undefined;
  place.replaceChildren(...children.flat(3).filter((c) => c !== null && c !== undefined && c !== false));
  if (held) place.querySelector(`[data-k="${CSS.escape(held)}"]`)?.focus({ preventScroll: true });
}

const shown = new WeakMap();

/// As `put`, but leaves the place alone where nothing would look otherwise: a click that is under way is not lost.
export function renew(place, ...children) {
  const next = document.createElement("div");
  next.append(...children.flat(3).filter((c) => c !== null && c !== undefined && c !== false));
  if (shown.get(place) === next.innerHTML) return;
  shown.set(place, next.innerHTML);
  put(place, [...next.childNodes]);
}

/// The mark of a priority: its shape says what its colour says.
export function mark(priority) {
  const shapes = {
    high: "M6 0 12 12 0 12Z",
    medium: "M6 0 12 6 6 12 0 6Z",
    low: "M1 1h10v10h-10Z",
  };
  return s("svg", { viewBox: "0 0 12 12", class: `mark p-${priority}`, "aria-hidden": "true" }, s("path", { d: shapes[priority] ?? shapes.low, fill: "currentColor" }));
}
