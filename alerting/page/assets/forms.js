// Takes what a person enters - a pilot report, a note, a reason to shelve, a
// hold - and sends it. Nothing is lost when it is refused: what was entered
// stays, and the reason stands beside it. Next is ask.js.

import { el } from "./dom.js";
import { may, send } from "./ask.js";
import { knot } from "./ground.js";

let count = 0;

/**
 * @param {string} label
 * @param {HTMLElement} field
 * @param {string} [wide]
 */
export function labelled(label, field, wide) {
  field.id = field.id || "field" + ++count;
  return el("label", { for: field.id, class: wide || null }, label, field);
}

/** @param {[string, string][]} options value and words @param {string} [chosen] */
export function choice(options, chosen) {
  return el("select", null, ...options.map(([value, words]) => el("option", { value, selected: value === chosen }, words)));
}

/**
 * A form that sends once and says what became of it.
 * @param {HTMLElement[]} fields
 * @param {string} word of its button
 * @param {() => Promise<any>} act
 * @param {(() => void) | null} after when it has been taken
 * @returns {HTMLFormElement}
 */
export function entry(fields, word, act, after) {
  const said = el("p", { class: "said", role: "status", hidden: true });
  const button = el("button", null, word);
  const form = el("form", { class: "entry" }, ...fields, button, said);
  form.addEventListener("submit", async (e) => {
    e.preventDefault();
    button.disabled = true;
    said.hidden = true;
    try {
      await act();
      said.textContent = "Recorded.";
      form.reset();
      if (after) after();
    } catch (error) {
      said.textContent = error instanceof Error ? error.message : String(error);
    }
    said.hidden = false;
    button.disabled = false;
  });
  return form;
}

/** @param {string} what @param {string} role */
export function needs(what, role) {
  return el("p", { class: "read" }, what + " needs somebody logged in as " + role + ".");
}

/**
 * @param {HTMLElement} host
 * @param {string[]} runways
 * @param {{event?: string, at: () => Date, after: () => void}} given
 */
export function pilotReport(host, runways, given) {
  if (!may("tower")) {
    host.replaceChildren(needs("A pilot report", "tower"));
    return;
  }
  const time = el("input", { type: "time", step: 1, value: given.at().toISOString().slice(11, 19) });
  const runway = choice(runways.map((r) => [r, r]));
  const operation = choice([["landing", "landing"], ["take-off", "take-off"]]);
  const felt = choice([["loss", "a loss of airspeed"], ["gain", "a gain of airspeed"], ["none", "nothing"]]);
  const amount = el("input", { type: "number", min: 0, max: 100, step: 1, placeholder: "unknown" });
  const from = el("input", { type: "number", min: -10, max: 20, step: 0.1, placeholder: "unknown" });
  const to = el("input", { type: "number", min: -10, max: 20, step: 0.1, placeholder: "unknown" });
  const around = el("input", { type: "checkbox" });
  const aircraft = el("input", { maxlength: 80 });
  const text = el("textarea", { maxlength: 2000 });
  const inline = labelled("went around", around);
  inline.classList.add("inline");
  const metres = (/** @type {HTMLInputElement} */ f) => (f.value === "" ? null : Math.round(Number(f.value) * 1000));
  host.replaceChildren(entry([
    labelled("At (UTC)", time), labelled("Runway", runway), labelled("Operation", operation), labelled("Felt", felt),
    labelled("About (kt)", amount), labelled("From, km before the threshold", from), labelled("To, km", to), inline,
    labelled("Aircraft type", aircraft), labelled("In words", text, "wide"),
  ], "Record the report", () => {
    const at = given.at();
    const [h, m, s] = time.value.split(":").map(Number);
    at.setUTCHours(h, m, s || 0, 0);
    // A time later than now is of yesterday: it is entered after midnight.
    if (at.getTime() > given.at().getTime() + 60000) at.setUTCDate(at.getUTCDate() - 1);
    return send("/api/v1/pilot-reports", {
      at: at.toISOString().slice(0, 19) + "Z", runway: runway.value, operation: operation.value, felt: felt.value,
      amount_kt: amount.value === "" ? 0 : Number(amount.value), from_m: metres(from), to_m: metres(to),
      go_around: around.checked, aircraft: aircraft.value, text: text.value, event: given.event || "",
    });
  }, given.after));
}

/** @param {HTMLElement} host @param {string} event @param {() => void} after */
export function noteEntry(host, event, after) {
  if (!may("officer")) {
    host.replaceChildren(needs("A note", "officer"));
    return;
  }
  const text = el("textarea", { maxlength: 4000, required: true });
  host.replaceChildren(entry([labelled("Note", text, "wide")], "Add the note",
    () => send("/api/v1/events/" + encodeURIComponent(event) + "/notes", { text: text.value }), after));
}

/** The ways to end a shelving: minutes and words. @type {[string, string][]} */
export const shelfTimes = [["15", "15 minutes"], ["30", "30 minutes"], ["60", "1 hour"], ["120", "2 hours"], ["240", "4 hours"], ["480", "8 hours"]];

/** Whole knots of metres a second. @param {number} ms */
export function inKnots(ms) {
  return Math.round(ms / knot);
}
