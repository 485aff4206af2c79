// The two things a person is asked: who they are, and what they have to say.

import { $, h, put } from "./dom.js";
import { get, token } from "./api.js";

function dialog(content) {
  const place = $("dialog");
  put(place, content);
  place.showModal();
  return new Promise((done) => place.addEventListener("close", () => done(place.returnValue), { once: true }));
}

/// Asks for a token; gives who it is, or null.
export async function askToken() {
  const wrong = h("p", { class: "wrong", role: "alert" });
  const field = h("input", { type: "password", autocomplete: "off", id: "token", required: true, spellcheck: "false" });
  const stay = h("input", { type: "checkbox", id: "token-keep" });
  let who = null;
  const place = $("dialog");
  place.returnValue = "";
  await dialog(
    h("form", { method: "dialog", onsubmit: async (e) => {
      if (e.submitter?.value === "no") return;
      e.preventDefault();
      try {
        const answer = await get("/api/v1/who", {}, { token: field.value.trim() });
        token.set(field.value.trim(), stay.checked);
        who = answer;
        place.close("yes");
      } catch (why) {
        wrong.textContent = why.message;
      }
    } },
      h("h2", { id: "dialog-h" }, "Sign with a token"),
      h("p", {}, "Whatever you change is written down under the token’s name. Tokens are made on the machine itself: ", h("code", {}, "borewake token SITE make NAME --scope operate")),
      h("label", { for: "token" }, "Token", field),
      h("label", { style: { display: "flex", gap: "0.5rem" } }, stay, "Keep it on this device"),
      wrong,
      h("div", { class: "acts" }, h("button", { class: "main", value: "yes" }, "Sign"), h("button", { value: "no", formnovalidate: true }, "Leave it"), token.get() ? h("button", { type: "button", onclick: () => (token.clear(), place.close("out")) }, "Forget my token") : null)));
  return who;
}

/// Asks for a note, does it, and stays open with the reason where it is refused.
export async function confirm({ title, text, label, say, sign, hours, due }) {
  const wrong = h("p", { class: "wrong", role: "alert" });
  const note = h("textarea", { id: "note", rows: 3, maxlength: 2000, required: due });
  const long = hours && h("select", { id: "hours" }, [[1, "1 hour"], [4, "4 hours"], [8, "8 hours"], [24, "1 day"], [72, "3 days"], [167, "1 week"]].map(([n, words]) => h("option", { value: n, selected: n === 8 }, words)));
  const place = $("dialog");
  // Asked anew only once this dialog is closed: its closing must not be taken for that of the next.
  const swapToken = () => (place.addEventListener("close", () => sign(), { once: true }), place.close("swap"));
  const swap = h("button", { type: "button", hidden: true, onclick: swapToken }, "Another token");
  await dialog(
    h("form", { method: "dialog", onsubmit: async (e) => {
      if (e.submitter?.value === "no") return;
      e.preventDefault();
      e.submitter.disabled = true;
      try {
        await say(note.value.trim(), long && Number(long.value));
        place.close("yes");
      } catch (why) {
        wrong.textContent = why.message;
        e.submitter.disabled = false;
        swap.hidden = why.status !== 401 && why.status !== 403;
      }
    } },
      h("h2", { id: "dialog-h" }, title),
      h("p", {}, text),
      long && h("label", { for: "hours" }, "For how long", long),
      h("label", { for: "note" }, due ? "Why" : "What you have to say (may be empty)", note),
      wrong,
      h("div", { class: "acts" }, h("button", { class: "main", value: "yes" }, label), h("button", { value: "no", formnovalidate: true }, "Leave it"), swap)));
}
