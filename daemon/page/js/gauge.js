// One gauge opened: what it showed, what it should have shown with its 95 % band, and the rates of the wells below.

import { h, s, put } from "./dom.js";
import { get, name } from "./api.js";
import * as u from "./units.js";

const LEFT = 74;
const RIGHT = 14;
const HIGH = 250;
const RATE = 74;

const path = (at, values, X, Y) => {
  let d = "";
  let pen = false;
  values.forEach((v, i) => {
    if (v === null) pen = false;
    else {
      d += `${pen ? "L" : "M"}${X(at[i]).toFixed(1)} ${Y(v).toFixed(1)}`;
      pen = true;
    }
  });
  return d;
};

/// A band between two rows of values, broken where either is missing.
function band(at, low, high, X, Y) {
  let d = "";
  let run = [];
  const end = () => {
    if (run.length > 1) d += `M${run.map((i) => `${X(at[i]).toFixed(1)} ${Y(high[i]).toFixed(1)}`).join("L")}L${[...run].reverse().map((i) => `${X(at[i]).toFixed(1)} ${Y(low[i]).toFixed(1)}`).join("L")}Z`;
    run = [];
  };
  at.forEach((_, i) => (low[i] === null || high[i] === null ? end() : run.push(i)));
  end();
  return d;
}

export async function load(site, gauge, window, bins) {
  const asked = { from: new Date(window.from * 1000).toISOString(), to: new Date(window.to * 1000).toISOString(), bins };
  const wells = site.wells.slice(0, 4);
  const [series, ...rates] = await Promise.all([
    get(`/api/v1/gauges/${name(gauge)}/series`, asked),
    ...wells.map((w) => get(`/api/v1/channels/${name(w.rate)}/readings`, { ...asked, bins: Math.min(bins, 300) }).catch(() => null)),
  ]);
  return { series, rates: rates.map((r, i) => r && { ...r, well: wells[i].name, share: wells[i].share }).filter((r) => r?.at.length) };
}

export function draw(place, { site, gauge, window, loaded, onset, shown }) {
  const about = site.gauges.find((g) => g.name === gauge);
  const { series, rates } = loaded;
  const W = Math.max(320, place.clientWidth || 800);
  const at = series.at.map((t) => t + series.bin_s / 2);
  const X = (t) => LEFT + ((t - window.from) / (window.to - window.from)) * (W - LEFT - RIGHT);
  const low = series.expected.map((e, i) => (e === null || series.sd[i] === null ? null : e - 1.96 * series.sd[i]));
  const high = series.expected.map((e, i) => (e === null || series.sd[i] === null ? null : e + 1.96 * series.sd[i]));
  const all = [...low, ...high, ...series.low, ...series.high].filter((v) => v !== null);
  if (!all.length) {
    put(place, h("p", { class: "none" }, `Nothing was judged of ${gauge} in this time. Its channel is ${about.channel}.`));
    return;
  }
  const [min, max] = all.reduce(([a, b], v) => [Math.min(a, v), Math.max(b, v)], [Infinity, -Infinity]);
  const pad = Math.max(0.06 * (max - min), 1);
  const [v0, v1] = [min - pad, max + pad];
  const Y = (v) => 8 + (1 - (v - v0) / (v1 - v0)) * (HIGH - 34);
  const [factor, label] = u.unit("pressure", Math.max(Math.abs(v0), Math.abs(v1)));
  const [ticks, places] = u.valueTicks(v0 / factor, v1 / factor, 4);
  const limits = site.limits.filter((l) => l.gauge === gauge && l.value > v0 && l.value < v1);
  const text = (x, y, words, more) => s("text", { x, y, "font-size": 12, fill: "var(--soft)", ...more }, words);
  const total = HIGH + (rates.length ? RATE + 12 : 0);
  const svg = s("svg", { viewBox: `0 0 ${W} ${total}`, role: "img", "aria-label": `Reading and expectation of ${gauge} from ${u.instant(window.from)} to ${u.instant(window.to)}` },
    ticks.map((t) => [s("path", { d: `M${LEFT} ${Y(t * factor).toFixed(1)}H${W - RIGHT}`, stroke: "var(--rule)" }), text(LEFT - 6, Y(t * factor) + 4, u.number(t, places), { "text-anchor": "end" })]),
    text(4, 14, label),
    u.timeTicks(window.from, window.to, W < 560 ? 4 : 8).map(([t, words]) => [s("path", { d: `M${X(t).toFixed(1)} ${HIGH - 26}v6`, stroke: "var(--soft)" }), text(X(t), HIGH - 8, words, { "text-anchor": "middle" })]),
    onset ? s("rect", { x: X(onset.from), y: 8, width: Math.max(2, X(onset.to) - X(onset.from)), height: HIGH - 34, fill: "var(--find)", opacity: 0.14 }) : null,
    s("path", { d: band(at, low, high, X, Y), fill: "var(--band)", stroke: "var(--act)", "stroke-opacity": 0.35 }),
    s("path", { d: path(at, series.expected, X, Y), fill: "none", stroke: "var(--act)", "stroke-width": 1.4, "stroke-dasharray": "6 3" }),
    s("path", { d: band(at, series.low, series.high, X, Y), fill: "var(--ink)", opacity: 0.3 }),
    s("path", { d: path(at, series.reading, X, Y), fill: "none", stroke: "var(--ink)", "stroke-width": 1.5 }),
    limits.map((l) => [s("path", { d: `M${LEFT} ${Y(l.value).toFixed(1)}H${W - RIGHT}`, stroke: "var(--medium)", "stroke-width": 1.5, "stroke-dasharray": "2 3" }), text(W - RIGHT, Y(l.value) - 4, `limit ${l.side} ${u.quantity("pressure", l.value)}`, { "text-anchor": "end", fill: "var(--medium)" })]),
    rates.length ? rateLanes(rates, X, W, text, window) : null);
  const last = series.reading.findLastIndex((v) => v !== null);
  const facts = [
    last >= 0 ? `last reading ${u.quantity("pressure", series.reading[last])}` : "no reading here",
    last >= 0 && series.expected[last] !== null ? `expected ${u.spread("pressure", series.expected[last], series.sd[last])}` : null,
    `means of ${u.span(series.bin_s)}`,
    about.well ? `in well ${about.well}` : null,
    about.elevation !== null ? `elevation ${u.quantity("length", about.elevation)}` : null,
    `${about.reference} pressure`,
    `stated noise ${u.quantity("pressure", about.noise)}`,
    `judged since ${u.instant(series.kept_from)}`,
  ].filter(Boolean);
  put(place, h("p", { class: "facts" }, h("span", {}, "— reading"), h("span", {}, "╌ expected, with the band that should hold 95 %")), svg, h("p", { class: "facts" }, facts.map((f) => h("span", {}, f))), shown);
}

/// Rates of the wells as steps on one axis, each named at its end.
function rateLanes(rates, X, W, text, window) {
  const values = rates.flatMap((r) => r.mean.map((v) => v * r.share));
  const top = Math.max(...values, 1e-9);
  const low = Math.min(...values, 0);
  const Y = (v) => HIGH + 8 + (1 - (v - low) / (top - low)) * (RATE - 20);
  const dashes = ["", "7 3", "2 3", "9 3 2 3"];
  const [factor, label] = u.unit("rate", top);
  return [
    text(4, HIGH + 14, label),
    text(LEFT - 6, Y(top) + 8, u.number(top / factor, 0), { "text-anchor": "end" }),
    text(LEFT - 6, Y(low) + 2, u.number(low / factor, 0), { "text-anchor": "end" }),
    s("path", { d: `M${LEFT} ${Y(0)}H${W - RIGHT}`, stroke: "var(--rule)" }),
    rates.map((r, i) => {
      let d = "";
      r.at.forEach((t, k) => {
        const [x, y] = [X(Math.max(t, window.from)).toFixed(1), Y(r.mean[k] * r.share).toFixed(1)];
        d += k ? `H${x}V${y}` : `M${x} ${y}`;
      });
      d += `H${X(Math.min(r.at.at(-1) + r.bin_s, window.to)).toFixed(1)}`;
      return [s("path", { d, fill: "none", stroke: "var(--soft)", "stroke-width": 1.3, "stroke-dasharray": dashes[i] || null }, s("title", {}, `rate of ${r.well}`)), text(LEFT + 6 + 80 * i, HIGH + RATE + 6, `${["──", "╌╌", "┈┈", "─·"][i]} ${r.well}`)];
    }),
  ];
}
