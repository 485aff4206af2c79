// The strip of departures: every gauge a row on one axis of time. Within ±3 standard deviations a row is quiet ink;
// beyond, it is filled and hatched; the tint holds ±2, where 95 % of a quiet record lies. The cursor is one for all rows and for the plan.

import { h, s, put } from "./dom.js";
import * as u from "./units.js";

const W = 1000;
const H = 100;
const QUIET = 3;
// Steep near zero, flat far out: 3 sd stand out, and 100 sd still fit.
const bend = (z) => Math.asinh(z / 2.5);
let top = 4;
const y = (z) => H / 2 - (Math.max(-1, Math.min(1, bend(z) / bend(top)))) * (H / 2 - 3);

/// Every row to one height, so that rows can be held against each other: the farthest departure shown, at least 4 sd.
function stretch(data) {
  const far = Math.max(...data.gauges.flatMap((row) => row.far.map((z) => Math.abs(z ?? 0))));
  top = [4, 6, 10, 20, 50, 100].find((t) => t >= far) ?? 100;
}

export const RANGES = [
  ["2 days", 2 * 86400],
  ["2 weeks", 14 * 86400],
  ["2 months", 61 * 86400],
  ["1 year", 365.25 * 86400],
  ["all", null],
];

/// Pieces of a row where something was judged, as outlines around zero.
function outline(values, x) {
  const pieces = [];
  let piece = [];
  const end = () => {
    if (piece.length) pieces.push(piece);
    piece = [];
  };
  values.forEach((z, i) => (z === null ? end() : piece.push([x(i), y(z)])));
  end();
  return pieces;
}

const line = (pieces) => pieces.map((p) => p.map(([px, py], i) => `${i ? "L" : "M"}${px.toFixed(1)} ${py.toFixed(1)}`).join("")).join("");
const area = (pieces) => pieces.map((p) => `M${p[0][0].toFixed(1)} ${H / 2}${p.map(([px, py]) => `L${px.toFixed(1)} ${py.toFixed(1)}`).join("")}L${p.at(-1)[0].toFixed(1)} ${H / 2}Z`).join("");

function picture(row, data, onset) {
  const { from, to } = data.shown;
  const X = (t) => ((t - from) / (to - from)) * W;
  const x = (i) => X(data.at[i] + data.bin_s / 2);
  const far = outline(row.far, x);
  const [head, foot] = [y(QUIET), y(-QUIET)];
  const id = `r${data.gauges.indexOf(row)}`;
  const beyond = row.far.some((z) => z !== null && Math.abs(z) > QUIET);
  const gaps = [];
  row.far.forEach((z, i) => {
    if (z === null) gaps.push(`M${X(data.at[i]).toFixed(1)} ${H / 2}H${X(data.at[i] + data.bin_s).toFixed(1)}`);
  });
  return s("svg", { viewBox: `0 0 ${W} ${H}`, preserveAspectRatio: "none", "aria-hidden": "true" },
    s("defs", {},
      s("clipPath", { id: `${id}c` }, s("path", { d: `M0 0H${W}V${head}H0ZM0 ${foot}H${W}V${H}H0Z` })),
      s("pattern", { id: `${id}h`, width: 9, height: 9, patternUnits: "userSpaceOnUse", patternTransform: "rotate(35)" }, s("path", { d: "M0 0v9", stroke: "var(--card)", "stroke-width": 2.2 }))),
    s("rect", { x: 0, y: y(2), width: W, height: y(-2) - y(2), fill: "var(--band)" }),
    onset ? s("rect", { x: X(onset.from), y: 0, width: Math.max(2, X(onset.to) - X(onset.from)), height: H, fill: "var(--find)", opacity: 0.16 }) : null,
    s("path", { d: `M0 ${H / 2}H${W}`, stroke: "var(--rule)", "stroke-width": 1, "vector-effect": "non-scaling-stroke" }),
    gaps.length ? s("path", { d: gaps.join(""), stroke: "var(--soft)", "stroke-width": 2, "stroke-dasharray": "1 5", "vector-effect": "non-scaling-stroke", fill: "none" }) : null,
    beyond ? s("g", { "clip-path": `url(#${id}c)` }, s("path", { d: area(far), fill: "var(--find)" }), s("path", { d: area(far), fill: `url(#${id}h)` })) : null,
    s("path", { d: line(far), fill: "none", stroke: "var(--trace)", "stroke-width": 1.2, "vector-effect": "non-scaling-stroke" }),
    s("path", { class: "cursor", d: "", stroke: "var(--act)", "stroke-width": 1.5, "vector-effect": "non-scaling-stroke" }));
}

/// The row's value at an instant: the bin it lies in.
export function ratioAt(data, row, at) {
  if (at === null) return row.last?.ratio ?? null;
  const i = Math.floor((at - data.at[0]) / data.bin_s);
  return row.far[i] ?? null;
}

export class Strip {
  constructor(place, tools, act) {
    this.place = place;
    this.tools = tools;
    this.act = act;
    this.rows = new Map();
  }

  draw({ data, blind, range, open, onset, cursor }) {
    this.data = data;
    this.blind = blind;
    this.drawTools(range);
    if (!data.at.length) {
      put(this.place, h("p", { class: "none" }, "Nothing has been judged in this time: there is no expectation to depart from."));
      return;
    }
    this.rows.clear();
    stretch(data);
    const slider = h("input", { type: "range", min: 0, max: data.at.length - 1, value: data.at.length - 1, "data-k": "cursor", "aria-label": "Look back in time", oninput: () => this.act.cursor(data.at[slider.value] + data.bin_s / 2) });
    this.slider = slider;
    const rows = data.gauges.map((row) => this.row(row, open === row.name, onset));
    const { from, to } = data.shown;
    const ticks = u.timeTicks(from, to, this.place.clientWidth < 560 ? 4 : 8);
    const axis = h("div", { class: "axis" }, h("span", {}, `±${top} sd`), h("div", { class: "ticks", "aria-hidden": "true" }, ticks.filter(([t]) => t > from + (this.place.clientWidth < 560 ? 0.12 : 0.05) * (to - from) && t < to - 0.04 * (to - from)).map(([t, text]) => h("span", { style: { left: `${((t - from) / (to - from)) * 100}%` } }, text))), h("span", {}), slider);
    put(this.place, rows, axis);
    this.move(cursor);
  }

  drawTools(range) {
    const buttons = RANGES.map(([text, span], i) => h("button", { type: "button", "aria-pressed": String(i === range), "data-k": `range-${i}`, onclick: () => this.act.range(i) }, text));
    this.at = h("span", { class: "at" });
    put(this.tools, buttons, this.at);
  }

  row(row, open, onset) {
    const shown = picture(row, this.data, onset);
    const pick = (e) => {
      const box = shown.getBoundingClientRect();
      const { from, to } = this.data.shown;
      this.act.cursor(from + ((e.clientX - box.left) / box.width) * (to - from));
    };
    shown.addEventListener("pointermove", (e) => e.pointerType === "mouse" && pick(e));
    shown.addEventListener("pointerleave", (e) => e.pointerType === "mouse" && this.act.cursor(null));
    shown.addEventListener("click", pick);
    const value = h("div", { class: "val" });
    const name = h("button", { type: "button", "aria-expanded": String(open), "data-k": `row-${row.name}`, onclick: () => this.act.open(row.name) }, row.name);
    const element = h("div", { class: "row-g" }, name, shown, value);
    this.rows.set(row.name, { element, value, shown, name, row });
    return [element, open ? h("div", { class: "open", id: "open-gauge" }) : null];
  }

  /// Puts the cursor at an instant; null is the newest.
  move(at) {
    if (!this.data?.at.length) return;
    const { from, to } = this.data.shown;
    const x = at === null ? null : ((at - from) / (to - from)) * W;
    for (const { element, value, shown, name, row } of this.rows.values()) {
      const ratio = ratioAt(this.data, row, at);
      const blind = at === null ? this.blind[row.name] : undefined;
      const off = ratio !== null && Math.abs(ratio) > QUIET;
      element.classList.toggle("off", off || Boolean(blind));
      const says = blind ? "blind" : u.deviations(ratio);
      const more = at === null && !blind && row.last ? u.quantity("pressure", row.last.departure, true) : off ? (ratio > 0 ? "▲ above" : "▼ below") : "";
      put(value, h("b", {}, says), more);
      name.setAttribute("aria-label", `${row.name}: ${says}`);
      shown.querySelector(".cursor").setAttribute("d", x === null ? "" : `M${x.toFixed(1)} 0V${H}`);
    }
    if (this.slider && at !== null && document.activeElement !== this.slider) this.slider.value = Math.round((at - this.data.at[0]) / this.data.bin_s);
    if (this.slider && at === null && document.activeElement !== this.slider) this.slider.value = this.slider.max;
    if (this.slider) this.slider.setAttribute("aria-valuetext", u.instant(at ?? this.data.until));
    this.at.textContent = at === null ? `newest: ${u.instant(this.data.until)}` : u.instant(at);
  }
}
