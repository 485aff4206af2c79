// Whether the daemon itself can be relied on now: sources, gauges, store, model.

import { h, renew } from "./dom.js";
import * as u from "./units.js";
import * as w from "./words.js";

const sum = (counts) => Object.values(counts).reduce((a, b) => a + b, 0);

export function drawKeeping(place, { site, snapshot, departures }) {
  const { health, store } = snapshot;
  const now = Date.parse(snapshot.taken) / 1000;
  const blind = Object.entries(snapshot.blind);
  const names = [...new Set([...Object.keys(snapshot.sources), ...site.channels.map((c) => c.source)])].sort();
  renew(place, h("div", { class: "keep" },
    h("div", {},
      h("h3", {}, "Model"),
      h("dl", {},
        h("dt", {}, "Watch"), h("dd", { class: health.watch ? "bad" : null }, health.watch ? `blind: ${health.watch}` : departures?.at.length ? `judged up to ${u.instant(departures.until)}` : "has judged nothing yet"),
        snapshot.evidence ? [h("dt", {}, "Evidence"), h("dd", {}, `e^${u.number(snapshot.evidence.log_mixture, 0)} to 1 against nothing; an alarm is due at e^${u.number(snapshot.evidence.log_threshold, 0)}`)] : null,
        h("dt", {}, "Blind"), h("dd", { class: blind.length ? "bad" : null }, blind.length ? blind.map(([g, why]) => `${g}: ${w.blind(why)}`).join("; ") : health.watch ? "every gauge" : "no gauge"),
        h("dt", {}, "Blocks"), h("dd", {}, `of ${u.span(site.block_s)}`))),
    h("div", {},
      h("h3", {}, "Store"),
      h("dl", {},
        h("dt", {}, "In use"), h("dd", {}, store.bytes === null ? "cannot be read" : `${u.bytes(store.bytes)}${store.max_bytes ? ` of ${u.bytes(store.max_bytes)}` : ""}`),
        h("dt", {}, "Since start"), h("dd", {}, `${health.committed.toLocaleString("en-GB")} readings kept, ${health.late} late, ${health.duplicates} twice, ${health.conflicts} in conflict`),
        h("dt", {}, "Outbox"), h("dd", {}, health.outbox ? `${health.outbox} messages wait for a broker` : "nothing waits"),
        h("dt", {}, "Program"), h("dd", {}, `borewake ${site.version}${site.replay ? ", playing a log" : ""}`))),
    h("div", {},
      h("h3", {}, "Sources"),
      h("table", {}, h("thead", {}, h("tr", {}, h("th", { scope: "col" }, "source"), h("th", { scope: "col" }, "state"), h("th", { scope: "col", class: "n" }, "refused"))),
        h("tbody", {}, names.map((name) => {
          const view = snapshot.sources[name];
          return h("tr", {}, h("td", {}, name), h("td", {}, view?.state || "comes from log files", view?.gaps ? `; ${view.gaps} polls missed` : ""), h("td", { class: "n" }, view ? sum(view.rejected) : ""));
        })))),
    h("div", {},
      h("h3", {}, "Channels"),
      h("table", {}, h("thead", {}, h("tr", {}, h("th", { scope: "col" }, "channel"), h("th", { scope: "col", class: "n" }, "newest"), h("th", { scope: "col", class: "n" }, "age"))),
        h("tbody", {}, site.channels.map((c) => {
          const view = snapshot.channels[c.name];
          const age = view?.sampled ? now - Date.parse(view.sampled) / 1000 : null;
          return h("tr", {}, h("td", {}, c.name), h("td", { class: "n" }, view?.sampled ? u.quantity(c.kind, view.value) : "none yet"), h("td", { class: "n" }, age === null ? "" : age < 0 ? u.day(view.sampled) : u.span(age)));
        }))))));
}
