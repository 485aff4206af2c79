// What causes, states and reasons are called, and the sentence that leads the page.

import * as u from "./units.js";

const CAUSES = {
  leak: "a leak",
  "cross-layer": "flow between layers",
  interference: "a neighbour at work",
  barrier: "a barrier in the ground",
  support: "support from outside",
  "gauge-step": "a jump of a gauge",
  "gauge-drift": "drift of a gauge",
  "gauge-stuck": "a stuck gauge",
  "gauge-scale": "a gauge's scale",
  "gauge-clock": "a gauge's clock",
  "meter-scale": "a meter reading wrong",
  "well-skin": "a change of a well's skin",
  unexplained: "nothing on the list",
};

export const cause = (of) => {
  const plain = CAUSES[of.cause] ?? of.cause;
  return of.of ? `${plain} (${of.of})` : plain;
};

const STATES = {
  normal: "back to normal",
  unacknowledged: "stands, not yet seen by anybody",
  acknowledged: "stands, acknowledged",
  "returned-unacknowledged": "over, not yet seen by anybody",
  "latched-unacknowledged": "over but latched, not yet seen by anybody",
  "latched-acknowledged": "over but latched, waits for a reset",
  shelved: "shelved",
  suppressed: "suppressed by a rule",
  "out-of-service": "out of service",
};
export const state = (of) => STATES[of] ?? of;

const STEPS = {
  raised: "raised",
  acknowledged: "acknowledged",
  returned: "returned to normal",
  changed: "changed: look again",
  updated: "brought up to date",
  revised: "revised",
  adopted: "taken into the model",
  shelved: "shelved",
  unshelved: "taken off the shelf",
  reset: "reset",
  "taken-out": "taken out of service",
  "put-back": "put back into service",
  escalated: "escalated: nobody saw it in time",
  realarmed: "to be seen again",
};
export const step = (of) => STEPS[of] ?? of;

const BLIND = {
  "no-data": "gives no usable reading",
  "stale-rate": "a rate it feels is too old",
  "no-ground": "no usable ground file",
  model: "it is beyond what commissioning has seen",
};
export const blind = (why) => BLIND[typeof why === "string" ? why.replace(/([a-z])([A-Z])/g, "$1-$2").toLowerCase() : why] ?? String(why);

const WAITS = { unacknowledged: 0, "returned-unacknowledged": 1, "latched-unacknowledged": 1 };
export const waits = (alarm) => alarm.state in WAITS;
export const stands = (alarm) => alarm.state !== "normal";
export const held = (alarm) => ["shelved", "suppressed", "out-of-service"].includes(alarm.state);
const PRIORITIES = ["high", "medium", "low"];

/// Most urgent first: what is so now, by priority, unseen before seen; then what is over and unseen, what is held back,
/// and what is normal. That somebody has seen a leak does not make it less.
export function order(alarms) {
  const stage = (a) => (a.state === "normal" ? 30 : held(a) ? 20 : a.condition === "present" ? 0 : 10);
  const rank = (a) => stage(a) + 2 * PRIORITIES.indexOf(a.priority) + (waits(a) ? 0 : 1);
  return [...alarms].sort((a, b) => rank(a) - rank(b) || Date.parse(b.since) - Date.parse(a.since));
}

/// A place to the digits that its radius allows.
export function place(of) {
  const [factor, label] = u.unit("length", 1);
  const step = 10 ** Math.max(0, Math.floor(Math.log10(of.radius_90_m / factor)) - 1);
  const round = (v) => u.number(Math.round(Math.abs(v) / factor / step) * step, 0);
  return `${round(of.x)} ${label} ${of.x < 0 ? "west" : "east"}, ${round(of.y)} ${label} ${of.y < 0 ? "south" : "north"} of the origin, in ${of.layer}; within ${round(of.radius_90_m)} ${label} with 90 %`;
}

export const capital = (text) => text.charAt(0).toUpperCase() + text.slice(1);

/// The finding in one sentence.
export function finding(of) {
  const lead = of.causes[0];
  const head = of.named
    ? `Most likely ${cause(lead)}`
    : of.causes[1] && of.cause !== "unexplained"
      ? `Something is off; perhaps ${cause(lead)}, perhaps ${cause(of.causes[1])}`
      : of.cause === "unexplained"
        ? "Something is off that no cause on the list explains"
        : `Something is off; perhaps ${cause(lead)}`;
  const size = of.size && of.cause !== "unexplained" ? `: ${u.size(of.size, of.cause)}` : "";
  return `${head}${size}, since ${u.instant(of.onset)}.`;
}
