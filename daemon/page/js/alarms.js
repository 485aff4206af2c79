// The alarms that stand, what each asks for, and the evidence of a finding.

import { h, mark, renew } from "./dom.js";
import * as u from "./units.js";
import * as w from "./words.js";

const MANY = 8;

export function drawAlarms(place, { alarms, open, act }) {
  const ordered = w.order(alarms);
  const standing = ordered.filter(w.stands);
  const past = ordered.filter((a) => !w.stands(a));
  renew(place,
    standing.length ? standing.map((a) => card(a, open, act)) : h("p", { class: "none" }, "No alarm stands."),
    past.length ? h("details", { "data-k": "past-alarms", open: act.pastOpen(), ontoggle: (e) => act.pastOpen(e.target.open) }, h("summary", { "data-k": "past-sum" }, `${past.length} back to normal lately`), past.slice(0, MANY).map((a) => card(a, open, act))) : null);
}

function card(a, open, act) {
  const key = `${a.alarm}.${a.occurrence}`;
  const shown = open === key;
  const waits = w.waits(a);
  const stands = w.stands(a);
  return h("article", { class: `alarm ${stands ? `p-${a.priority}` : "past"} ${waits ? "" : "seen"}`, "aria-label": `${a.priority} alarm ${a.alarm}`, id: `alarm-${a.alarm}` },
    h("header", {},
      h("h3", {}, stands ? mark(a.priority) : null, a.alarm),
      h("span", { class: `tag ${waits && stands ? "solid" : ""} p-${a.priority}` }, h("span", {}, `${a.priority} priority`)),
      h("span", { class: "state" }, w.state(a.state), a.suppression?.until ? ` until ${u.instant(a.suppression.until)}` : ""),
      h("span", { class: "meta" }, `since ${u.instant(a.since)}`, a.occurrence > 1 ? `, occurrence ${a.occurrence}` : "")),
    h("p", {}, a.finding ? w.finding(a.finding) : a.summary),
    a.finding?.place ? h("p", { class: "meta" }, w.capital(w.place(a.finding.place)), ".") : null,
    a.response && stands ? h("p", { class: "do" }, h("strong", {}, "To do: "), a.response) : null,
    h("div", { class: "acts" },
      waits ? h("button", { type: "button", class: "main", "data-k": `ack-${key}`, onclick: () => act.acknowledge(a) }, "Acknowledge") : null,
      a.finding ? h("button", { type: "button", "aria-expanded": String(shown), "data-k": `ev-${key}`, onclick: () => act.open(key) }, shown ? "Hide the evidence" : "Show the evidence") : null,
      a.state === "latched-acknowledged" ? h("button", { type: "button", class: "main", "data-k": `reset-${key}`, onclick: () => act.reset(a) }, "Reset") : null,
      more(a, key, act)),
    shown && a.finding ? evidence(a.finding, act) : null);
}

/// What is done seldom, and with a reason.
function more(a, key, act) {
  const held = a.suppression.by;
  const button = (name, text) => h("button", { type: "button", "data-k": `${name}-${key}`, onclick: () => act[name](a) }, text);
  if (held === "shelved") return button("unshelve", "Bring back now");
  if (held === "out-of-service") return button("putBack", "Put back into service");
  if (!w.stands(a)) return null;
  return [button("shelve", "Quiet until …"), button("takeOut", "Out of service"), a.finding && a.condition === "present" ? button("adopt", "Take into the model") : null];
}

function evidence(f, act) {
  const [lead, next] = f.causes;
  const close = next && next.probability > lead.probability / 3;
  return h("div", { class: "evidence" },
    h("div", {},
      h("h3", {}, "Causes weighed"),
      f.causes.filter((c) => c.probability >= 0.005).slice(0, 6).map((c) => h("p", { class: "share" }, h("span", {}, w.cause(c)), h("i", { "aria-hidden": "true" }, h("i", { style: { width: `${100 * c.probability}%` } })), h("b", {}, c.probability > 0.995 ? "> 99 %" : `${u.number(100 * c.probability, 0)} %`))),
      h("p", { class: "meta" }, f.named ? "The first leads by the margin asked for, and explains what is seen." : close ? "No cause is named: the first two are too close. A planned change of one well's rate tells a leak from a meter; a check reading tells a gauge from the ground." : "No cause is named: what it leaves unexplained is more than at commissioning.")),
    h("div", {},
      h("h3", {}, "When, how large, where"),
      h("dl", {},
        h("dt", {}, "Onset"), h("dd", {}, `${u.instant(f.onset)} ± ${u.span(f.onset_sd_s)}`),
        f.size ? [h("dt", {}, "Size"), h("dd", {}, u.size(f.size, f.cause))] : null,
        f.place ? [h("dt", {}, "Place"), h("dd", {}, w.place(f.place))] : null,
        h("dt", {}, "Evidence"), h("dd", {}, `e^${u.number(f.log_mixture, 0)} to 1 against nothing; an alarm is due at e^${u.number(f.log_threshold, 0)}`))),
    h("div", {},
      h("h3", {}, "Gauges most affected"),
      h("table", {}, h("thead", {}, h("tr", {}, h("th", { scope: "col" }, "gauge"), h("th", { scope: "col", class: "n" }, "departure"))),
        h("tbody", {}, f.gauges.map((g) => h("tr", {}, h("td", {}, h("button", { type: "button", "data-k": `evg-${g.name}`, onclick: () => act.gauge(g.name) }, g.name)), h("td", { class: "n" }, u.spread("pressure", g.departure, g.sd, true))))))));
}

/// What happened, newest first.
export function drawPast(place, steps) {
  if (!steps.length) {
    renew(place, h("p", { class: "none" }, "Nothing has happened yet."));
    return;
  }
  const told = gathered(steps);
  renew(place, h("div", { class: "wide", tabindex: 0, role: "region", "aria-label": "What happened" }, h("table", {},
    h("thead", {}, h("tr", {}, ["when", "alarm", "what", "who", "says"].map((t) => h("th", { scope: "col" }, t)))),
    h("tbody", {}, told.slice(0, 40).map((t) => h("tr", {},
      h("td", { class: "l" }, u.instant(t.at)),
      h("td", { class: "l" }, `${t.alarm}${t.occurrence > 1 ? ` #${t.occurrence}` : ""}`),
      h("td", { class: "l" }, w.step(t.transition), t.times > 1 ? ` ${t.times} times` : ""),
      h("td", {}, t.by ?? ""),
      h("td", {}, t.note || t.summary)))))));
}

/// Steps that only bring an alarm up to date are told once, with the newest.
function gathered(steps) {
  const told = [];
  for (const step of steps) {
    const same = told.at(-1);
    if (same?.transition === "updated" && step.transition === "updated" && same.alarm === step.alarm && same.occurrence === step.occurrence) same.times += 1;
    else told.push({ ...step, times: 1 });
  }
  return told;
}
