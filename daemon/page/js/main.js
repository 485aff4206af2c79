// Asks, holds what was answered, and draws what changed.

import { $, h, mark, renew } from "./dom.js";
import { Refused, get, listen, name, post, token } from "./api.js";
import * as u from "./units.js";
import * as w from "./words.js";
import { drawPlan } from "./plan.js";
import { RANGES, Strip, ratioAt } from "./strip.js";
import * as gauge from "./gauge.js";
import { drawAlarms, drawPast } from "./alarms.js";
import { drawKeeping } from "./keeping.js";
import { askToken, confirm } from "./dialog.js";

const EVERY = 10000;
const OLD = 45000;

const state = { site: null, snapshot: null, alarms: [], departures: null, past: [], range: null, cursor: null, layer: 0, gauge: null, evidence: null, pastOpen: false, heard: 0, needs: null };

const strip = new Strip($("strip"), $("strip-tools"), {
  range: (i) => ((state.range = i), (state.cursor = null), look(true)),
  open: (of) => openGauge(state.gauge === of ? null : of),
  cursor: (at) => ((state.cursor = at), strip.move(at), planNow()),
});

/// The finding that stands now, if any.
const finding = () => w.order(state.alarms).find((a) => a.finding && a.condition === "present")?.finding ?? null;

function onset() {
  const of = finding();
  if (!of) return null;
  const at = Date.parse(of.onset) / 1000;
  return { from: at - of.onset_sd_s, to: at + of.onset_sd_s };
}

let drawnWindow = "";
async function look(all) {
  try {
    const [snapshot, alarms] = await Promise.all([get("/api/v1/snapshot"), get("/api/v1/alarms")]);
    if (!state.site) {
      state.site = await get("/api/v1/site");
      u.choose(setting("units", state.site.units));
      $("units").value = setting("units", state.site.units);
    }
    const moved = all || snapshot.block !== state.snapshot?.block || !state.departures;
    const rang = alarms.last_event !== state.last;
    Object.assign(state, { snapshot, alarms: alarms.alarms, last: alarms.last_event, heard: Date.now(), needs: null });
    if (moved) await lookBack();
    if (rang || all) state.past = (await get("/api/v1/history", { limit: 200 })).history;
    draw();
    const window = JSON.stringify(state.departures.shown) + state.gauge;
    if (state.gauge && (moved || window !== drawnWindow)) await showGauge();
    drawnWindow = window;
    return true;
  } catch (why) {
    failed(why);
    return false;
  }
}

/// At first, as far back as what stands now began.
function rangeOf(to) {
  const began = onset()?.from;
  if (!began) return 1;
  const age = (to - began) * 1.15;
  const found = RANGES.findIndex(([, span]) => span && span > age);
  return Math.max(1, found < 0 ? RANGES.length - 1 : found);
}

async function lookBack() {
  const first = await get("/api/v1/departures", { bins: 1 });
  const to = Date.parse(first.until) / 1000;
  state.range ??= rangeOf(to);
  const span = RANGES[state.range][1];
  const kept = Date.parse(first.kept_from) / 1000;
  // Not before anything was judged: an empty sheet says nothing.
  const from = Math.min(Math.max(span ? to - span : kept, kept), to - 86400);
  const bins = Math.max(60, Math.min(900, Math.round($("strip").clientWidth * 0.75)));
  const iso = (t) => new Date(t * 1000).toISOString();
  const data = await get("/api/v1/departures", { from: iso(from), to: iso(to), bins });
  state.departures = { ...data, until: to, shown: { from, to } };
}

function failed(why) {
  if (why instanceof Refused && why.status === 401) {
    state.needs = why.message;
    draw();
    return;
  }
  console.warn(why);
  contact();
}

/// Says so when what is shown is old: silence must not look like calm.
function contact() {
  const lost = state.heard && Date.now() - state.heard > OLD;
  const never = !state.heard && performance.now() > 8000 && !state.needs;
  $("lost").hidden = !(lost || never);
  if (lost) $("lost").textContent = `The daemon has not answered since ${u.clock(state.heard / 1000)}. What is shown is old; nothing on this page can be relied on.`;
  if (never) $("lost").textContent = "The daemon does not answer. Nothing can be shown.";
}

const setting = (key, other) => {
  try {
    return localStorage.getItem(`borewake-${key}`) ?? other;
  } catch {
    return other;
  }
};
const keep = (key, value) => {
  try {
    localStorage.setItem(`borewake-${key}`, value);
  } catch {
    // A private window forgets.
  }
};

function draw() {
  contact();
  if (state.needs && !state.site) {
    renew($("said"), h("p", { class: "line" }, "This daemon asks for a token before it shows anything."), h("p", { class: "more" }, state.needs), h("div", { class: "row" }, h("button", { type: "button", class: "main", "data-k": "need", onclick: sign }, "Give a token")));
    return;
  }
  if (!state.site) return;
  const { site, snapshot, departures } = state;
  $("site-name").textContent = site.name;
  $("asof").textContent = departures.at.length ? `judged up to ${u.instant(departures.until)}${site.replay ? ", a played log" : ""}` : "nothing judged yet";
  renew($("notice"), h("strong", {}, "It advises; it is no safety function. "), site.notice);
  said();
  planNow();
  strip.draw({ data: departures, blind: snapshot.blind, range: state.range, open: state.gauge, onset: onset(), cursor: state.cursor });
  if (state.gauge && state.loaded) gaugeNow();
  drawAlarms($("alarms"), { alarms: state.alarms, open: state.evidence, act: acts });
  drawKeeping($("keeping"), { site, snapshot, departures });
  drawPast($("past"), state.past);
}

/// The one line that a tired person reads first.
function said() {
  const { snapshot, site } = state;
  const standing = w.order(state.alarms.filter(w.stands));
  const unseen = standing.filter(w.waits);
  const blind = Object.keys(snapshot.blind).length;
  const lead = standing[0];
  document.title = `${unseen.length ? `(${unseen.length}) ` : ""}${site.name} · borewake`;
  const place = $("said");
  place.classList.toggle("calm", !standing.length);
  if (!lead) {
    const line = snapshot.health.watch ? "No limit is passed, and the watch is blind." : `Nothing stands out: ${site.gauges.length - blind} of ${site.gauges.length} gauges show what the wells and the ground explain.`;
    renew(place, h("p", { class: "line" }, line), h("p", { class: "more" }, snapshot.health.watch ?? "Silence is not safety: keep a dead-man’s switch on the heartbeat, outside this machine."));
    return;
  }
  const rest = standing.length - 1;
  // The gist in large, the particulars below it.
  const [, head, tail] = /^(.*?)(?:[:;] (.*))?$/s.exec(lead.summary);
  const quiet = standing.filter((a) => a !== lead && w.held(a)).length;
  const others = unseen.filter((a) => a !== lead).length;
  renew(place,
    h("p", { class: "line" }, h("span", { class: `p-${lead.priority}` }, mark(lead.priority)), lead.finding ? w.finding(lead.finding) : w.capital(head)),
    h("p", { class: "more" }, [lead.finding || !tail ? "" : `${w.capital(tail)}. `, lead.finding?.place ? `About ${w.place(lead.finding.place)}. ` : "", `${w.capital(lead.priority)} priority; ${w.state(lead.state)}. `, rest ? `${rest} more ${rest > 1 ? "alarms" : "alarm"}${others ? `, ${others} not yet seen by anybody` : ""}${quiet ? `, ${quiet} held back` : ""}.` : "It is the only alarm."]),
    h("div", { class: "row" },
      w.waits(lead) ? h("button", { type: "button", class: "main", "data-k": "said-ack", onclick: () => acts.acknowledge(lead) }, "Acknowledge") : null,
      lead.finding ? h("button", { type: "button", "data-k": "said-why", onclick: () => why(lead) }, "Why?") : null,
      rest ? h("button", { type: "button", "data-k": "said-all", onclick: () => $("alarms-h").scrollIntoView({ block: "start" }) }, "All alarms") : null));
}

function why(alarm) {
  state.evidence = `${alarm.alarm}.${alarm.occurrence}`;
  draw();
  const card = document.getElementById(`alarm-${alarm.alarm}`);
  card?.scrollIntoView({ block: "start" });
  card?.querySelector('[aria-expanded="true"]')?.focus({ preventScroll: true });
}

function planNow() {
  const { site, snapshot, departures, cursor } = state;
  const ratios = Object.fromEntries(departures.gauges.map((row) => [row.name, ratioAt(departures, row, cursor)]));
  drawPlan($("plan"), { site, layer: state.layer, setLayer: (i) => ((state.layer = i), planNow()), found: finding()?.place, ratios, blind: cursor === null ? snapshot.blind : {}, open: openGauge, at: cursor });
}

async function openGauge(of) {
  state.gauge = of;
  state.loaded = null;
  draw();
  if (of) {
    await showGauge();
    $("open-gauge")?.scrollIntoView({ block: "nearest" });
  }
}

async function showGauge() {
  const of = state.gauge;
  try {
    const loaded = await gauge.load(state.site, of, state.departures.shown, Math.max(100, Math.min(900, $("strip").clientWidth)));
    if (of !== state.gauge) return;
    state.loaded = loaded;
    gaugeNow();
  } catch (why) {
    failed(why);
  }
}

function gaugeNow() {
  const place = $("open-gauge");
  if (place) gauge.draw(place, { site: state.site, gauge: state.gauge, window: state.departures.shown, loaded: state.loaded, onset: onset() });
}

async function change(alarm, act, title, text, label, more = {}) {
  if (!token.get() && !(await sign())) return;
  await confirm({
    title,
    text,
    label,
    ...more,
    say: async (note, hours) => {
      // The daemon's clock counts, also where that of a replay or of this device is another.
      const until = hours ? new Date(Date.parse(state.snapshot.taken) + hours * 3600000).toISOString() : undefined;
      await post(`/api/v1/alarms/${name(alarm.alarm)}/${act}`, { occurrence: alarm.occurrence, note, until });
      await look(true);
    },
    sign,
  });
}

const acts = {
  acknowledge: (a) => change(a, "acknowledge", `Acknowledge ${a.alarm}`, "Says that you have seen it, not that it is mended. Your name goes into the journal.", "Acknowledge"),
  adopt: (a) => change(a, "adopt", `Take ${a.alarm} into the model`, "From its onset on, the model will count this as explained, and the watch goes on past it. Do it when the cause is understood. Your name goes into the journal.", "Take it in"),
  shelve: (a) => change(a, "shelve", `Quiet ${a.alarm} for a while`, "It goes on being judged and written down, and comes back by itself: as an alarm, if it still stands. Your name goes into the journal.", "Quiet it", { hours: true, due: true }),
  unshelve: (a) => change(a, "unshelve", `Bring ${a.alarm} back`, "It comes back as an alarm if it still stands. Your name goes into the journal.", "Bring back"),
  takeOut: (a) => change(a, "take-out", `Take ${a.alarm} out of service`, "For maintenance: it goes on being judged and written down, and stays quiet until somebody puts it back. Your name goes into the journal.", "Take out", { due: true }),
  putBack: (a) => change(a, "put-back", `Put ${a.alarm} back into service`, "It comes back as an alarm if it still stands. Your name goes into the journal.", "Put back"),
  reset: (a) => change(a, "reset", `Reset ${a.alarm}`, "Its condition is gone; resetting lets go of the latch. Your name goes into the journal.", "Reset"),
  open: (key) => ((state.evidence = state.evidence === key ? null : key), draw()),
  gauge: (of) => openGauge(of).then(() => $("strip-h").scrollIntoView({ block: "start" })),
  pastOpen: (open) => (open === undefined ? state.pastOpen : (state.pastOpen = open)),
};

async function sign() {
  const who = await askToken();
  await showWho();
  if (who) await look(true);
  return who;
}

async function showWho() {
  let text = "Sign with a token";
  if (token.get()) {
    try {
      const who = await get("/api/v1/who");
      text = who.name ? `${who.name}: may ${who.scope}` : text;
    } catch (why) {
      text = why instanceof Refused ? "Token refused: sign again" : text;
    }
  }
  $("key").textContent = text;
}

$("key").addEventListener("click", sign);
$("units").addEventListener("change", (e) => (keep("units", e.target.value), u.choose(e.target.value), draw()));
$("zone").addEventListener("change", (e) => (keep("zone", e.target.value), u.chooseZone(e.target.value), draw()));
$("light").addEventListener("change", (e) => light(e.target.value));
function light(value) {
  keep("light", value);
  if (value === "auto") delete document.documentElement.dataset.light;
  else document.documentElement.dataset.light = value;
  $("light").value = value;
}
light(setting("light", "auto"));
u.chooseZone(setting("zone", "utc"));
$("zone").value = u.chosenZone();

let sized = innerWidth;
addEventListener("resize", () => {
  if (Math.abs(innerWidth - sized) < 40) return;
  sized = innerWidth;
  if (state.site) look(true);
});

await showWho();
await look(true);
setInterval(() => look(false), EVERY);
setInterval(contact, 5000);
listen(state.last ?? 0, (event) => {
  const { data } = event;
  if (data.transition === "raised" || data.transition === "changed") $("news").textContent = `${data.priority} alarm: ${data.summary}`;
  look(false);
});
