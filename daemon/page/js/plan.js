// The site from above: north up, one layer at a time. A gauge's barb rises where it shows more than expected and hangs
// where it shows less, at the instant that the strip's cursor stands at.

import { h, s, put } from "./dom.js";
import * as u from "./units.js";

// Drawn to the pixels there are, so that names are as large as other text.
let WIDTH = 520;

function bounds(site, found) {
  const points = [...site.wells, ...site.gauges, ...site.neighbours].map((p) => p.at).filter(Boolean);
  if (found) points.push([found.x - found.r, found.y - found.r], [found.x + found.r, found.y + found.r]);
  let [x0, x1, y0, y1] = [Infinity, -Infinity, Infinity, -Infinity];
  for (const [x, y] of points) {
    x0 = Math.min(x0, x); x1 = Math.max(x1, x); y0 = Math.min(y0, y); y1 = Math.max(y1, y);
  }
  if (!points.length) [x0, x1, y0, y1] = [-100, 100, -100, 100];
  const pad = 0.16 * Math.max(x1 - x0, y1 - y0, 50);
  return [x0 - pad, x1 + pad, y0 - pad, y1 + pad];
}

const round = (length) => {
  const power = 10 ** Math.floor(Math.log10(length));
  return [5, 2, 1].map((m) => m * power).find((m) => m <= length);
};

/// Names of what stands at one place are written once.
function places(site, layer) {
  const at = new Map();
  const add = (kind, thing) => {
    if (!thing.at) return;
    const key = thing.at.map((c) => Math.round(c)).join(",");
    const found = at.get(key) ?? { at: thing.at, layer: thing.layer };
    found[kind] = thing;
    at.set(key, found);
  };
  site.wells.forEach((w) => add("well", w));
  site.gauges.forEach((g) => add("gauge", g));
  site.neighbours.forEach((n) => add("neighbour", n));
  return [...at.values()].map((p) => ({ ...p, here: p.layer === layer }));
}

export function drawPlan(place, { site, layer, setLayer, found, ratios, blind, open, at }) {
  WIDTH = Math.min(620, Math.max(300, place.clientWidth || 520));
  const [x0, x1, y0, y1] = bounds(site, found && { x: found.x, y: found.y, r: found.radius_90_m });
  const scale = WIDTH / (x1 - x0);
  const height = Math.min(640, Math.max(260, (y1 - y0) * scale));
  const X = (x) => (x - x0) * scale;
  const Y = (y) => (y1 - y) * scale + (height - (y1 - y0) * scale) / 2;
  const words = [];
  const drawn = [];

  const along = (line) => line.map(([x, y], i) => `${i ? "L" : "M"}${X(x).toFixed(1)} ${Y(y).toFixed(1)}`).join("");
  for (const stage of site.stages) {
    drawn.push(s("path", { d: along(stage.line), fill: "none", stroke: "var(--rule)", "stroke-width": 9, "stroke-linejoin": "round" }, s("title", {}, `${stage.name}: open water`)));
    words.push(`open water ${stage.name}`);
  }
  for (const well of site.wells.filter((w) => w.trace.length)) {
    drawn.push(s("path", { d: along(well.trace), fill: "none", stroke: "var(--ink)", "stroke-width": 1.6 }, s("title", {}, `${well.name}: one pressure along its trace`)));
  }

  for (const barrier of site.barriers) {
    const d = along(barrier.line);
    drawn.push(s("path", { d, fill: "none", stroke: "var(--ink)", "stroke-width": barrier.sealed ? 4 : 2.5, "stroke-dasharray": barrier.sealed ? null : "10 4" }, s("title", {}, `${barrier.name}: ${barrier.sealed ? "sealed" : "resists flow"}`)));
    const [bx, by] = barrier.line[Math.floor(barrier.line.length / 2)];
    drawn.push(label(X(bx) + 6, Y(by), barrier.name, "var(--soft)"));
    words.push(`barrier ${barrier.name}`);
  }

  if (found) {
    const r = Math.max(4, found.radius_90_m * scale);
    const there = site.layers[layer]?.name === found.layer;
    drawn.push(
      s("g", { opacity: there ? 1 : 0.35 },
        s("circle", { cx: X(found.x), cy: Y(found.y), r, fill: "url(#hatch)", stroke: "var(--find)", "stroke-width": 1.6 },
          s("title", {}, `The finding lies within this circle with 90 %: ${u.quantity("length", found.radius_90_m)}`)),
        s("path", { d: `M${X(found.x) - 7} ${Y(found.y)}h14M${X(found.x)} ${Y(found.y) - 7}v14`, stroke: "var(--find)", "stroke-width": 2 })),
    );
    words.push("the place of the finding with its 90 % circle");
  }

  for (const p of places(site, layer)) {
    const [x, y] = [X(p.at[0]), Y(p.at[1])];
    const group = s("g", { opacity: p.here ? 1 : 0.3 });
    if (p.well) group.append(s("path", { d: `M${x - 6} ${y - 6}h12v12h-12z`, fill: "var(--card)", stroke: "var(--ink)", "stroke-width": 1.6 }));
    if (p.neighbour) {
      group.append(s("path", { d: `M${x - 6} ${y - 6}h12v12h-12z`, fill: "none", stroke: "var(--soft)", "stroke-dasharray": "3 2", "stroke-width": 1.6 }, s("title", {}, "a well of somebody else's; its rate is not known")));
      group.append(label(x + 10, y + 4, p.neighbour.name, "var(--soft)"));
    }
    if (p.gauge) group.append(...gauge(p, x, y, ratios?.[p.gauge.name], blind[p.gauge.name], open));
    else if (p.well) group.append(label(x + 10, y + 4, p.well.name));
    drawn.push(group);
  }

  const bar = round((x1 - x0) / 4);
  const svg = s("svg", { viewBox: `0 0 ${WIDTH} ${height.toFixed(0)}`, role: "group", "aria-label": `Plan of ${site.name}` },
    s("defs", {}, s("pattern", { id: "hatch", width: 7, height: 7, patternUnits: "userSpaceOnUse", patternTransform: "rotate(45)" }, s("path", { d: "M0 0v7", stroke: "var(--find)", "stroke-width": 1.3, opacity: 0.55 }))),
    ...drawn,
    s("g", { "aria-hidden": "true", stroke: "var(--soft)", fill: "none" },
      s("path", { d: `M12 ${height - 12}v-5m0 5h${bar * scale}v-5` }),
      s("path", { d: `M${WIDTH - 18} ${height - 26}v-24m-5 8l5-8 5 8` })),
    label(16, height - 18, u.quantity("length", bar), "var(--soft)"),
    label(WIDTH - 23.5, height - 10, "N", "var(--soft)"));
  const pick = site.layers.length > 1 &&
    h("div", { class: "pick", role: "group", "aria-label": "Layer" }, site.layers.map((l, i) => h("button", { type: "button", "aria-pressed": String(i === layer), "data-k": `layer-${i}`, onclick: () => setLayer(i) }, l.name)));
  const key = h("p", { class: "key" },
    h("span", {}, s("svg", { viewBox: "0 0 14 14", "aria-hidden": "true" }, s("path", { d: "M2 2h10v10h-10z", fill: "none", stroke: "currentColor", "stroke-width": 1.5 })), "well"),
    h("span", {}, s("svg", { viewBox: "0 0 14 14", "aria-hidden": "true" }, s("circle", { cx: 7, cy: 7, r: 4, fill: "none", stroke: "currentColor", "stroke-width": 1.5 })), "gauge; its barb rises above and hangs below what is expected"),
    at ? h("span", {}, `as of ${u.instant(at)}`) : null);
  put(place, pick, svg, key);
}

/// Text right of a place, or left of it where it would run out of the sheet.
const label = (x, y, text, colour = "var(--ink)") => s("text", { ...(x + 8 * text.length > WIDTH ? { x: (x - 20).toFixed(1), "text-anchor": "end" } : { x: x.toFixed(1) }), y: y.toFixed(1), "font-size": 15, fill: colour, "paint-order": "stroke", stroke: "var(--card)", "stroke-width": 3.5, "stroke-linejoin": "round" }, text);

/// A gauge can be opened from the plan as from its row.
function gauge(p, x, y, ratio, blind, open) {
  const known = Number.isFinite(ratio);
  const off = known && Math.abs(ratio) > 3;
  const colour = off ? "var(--find)" : "var(--ink)";
  const length = known ? Math.sign(ratio) * Math.min(46, 9 * Math.asinh(Math.abs(ratio))) : 0;
  const text = blind ? "blind" : known && off ? u.deviations(ratio) : "";
  const says = `${p.gauge.name}: ${blind ? "blind" : known ? `${u.deviations(ratio)} from what is expected` : "not judged"}`;
  const act = () => open(p.gauge.name);
  return [
    s("g", { tabindex: 0, role: "button", "aria-label": says, "data-k": `plan-${p.gauge.name}`, style: { cursor: "pointer" }, onclick: act, onkeydown: (e) => (e.key === "Enter" || e.key === " ") && (e.preventDefault(), act()) },
      s("rect", { x: x - 12, y: y - 16, width: 24, height: 32, fill: "transparent" }),
      s("title", {}, says),
      Math.abs(length) > 1 ? s("path", { d: `M${x} ${y}v${(-length).toFixed(1)}m-5 0h10`, stroke: colour, "stroke-width": off ? 4 : 2, fill: "none" }) : null,
      s("circle", { cx: x, cy: y, r: p.well ? 3.2 : 5, fill: blind ? "var(--card)" : colour, stroke: colour, "stroke-width": 1.6, "stroke-dasharray": blind ? "2 2" : null })),
    label(x + 11, y + 5, p.gauge.name, colour),
    text ? label(x + 11, y + 21, text, colour) : null,
  ].filter(Boolean);
}
