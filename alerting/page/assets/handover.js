// Takes what stands open, what is shelved or out of service, and what happened
// in the last twelve hours, and puts it on one screen for who takes over, who
// signs it. Next is ask.js.

import { byId, el } from "./dom.js";
import { may, read, send } from "./ask.js";
import { live } from "./live.js";
import { occurrencesOf } from "./alerts.js";
import { entry, labelled, needs } from "./forms.js";
import { dayAndTime, kindWords, levelNumber, pathName, stateWords, timeOf } from "./words.js";

/** @type {any} */
let last = null;
let asked = false;

/** @param {string} id @param {(string | Node)[]} items @param {string} none */
function list(id, items, none) {
  byId(id).replaceChildren(items.length ? el("ul", null, ...items.map((i) => el("li", null, i))) : el("p", null, none));
}

/** @param {any} body */
function step(body) {
  last = body;
  const shown = occurrencesOf(body);
  list("open", shown.map((s) => s.occurrence.sentence + (s.occurrence.acknowledged_by ? " Acknowledged by " + s.occurrence.acknowledged_by + "." : " Not acknowledged.")),
    "No alert is open. That does not mean no windshear.");
  list("shelved", shown.filter((s) => s.occurrence.shelved_until).map((s) => "Until " + timeOf(s.occurrence.shelved_until) + " UTC, " + s.occurrence.shelved_reason + ": " + s.occurrence.sentence), "Nothing is shelved.");
  const out = body.stations.filter((/** @type {any} */ s) => !s.live).map((/** @type {any} */ s) => "Mast " + s.id + ": " + stateWords(s.state));
  const blind = (body.paths || []).filter((/** @type {any} */ p) => p.state === "not-observed").map((/** @type {any} */ p) => pathName(p.runway, p.operation) + ": not observed" + (p.reason ? ", " + p.reason : ""));
  const status = body.status || {};
  const remarks = (status.remarks || []).slice();
  if (status.history && status.history.degraded) remarks.push("The history may miss what is told now: " + status.history.reason);
  list("out", [...out, ...blind, ...remarks], "Every mast serves ground, and every path is observed where it has to be.");
  if (asked) return;
  asked = true;
  void ask();
  sign();
}

async function ask() {
  const to = new Date(Date.parse(last.at) + 1000);
  const from = new Date(to.getTime() - 12 * 3600000);
  const time = (/** @type {Date} */ t) => t.toISOString().slice(0, 19) + "Z";
  const exercise = document.body.dataset.exercise === "true";
  try {
    const { events, highest_level: highest } = await read("/api/v1/events?limit=200&from=" + time(from) + "&to=" + time(to));
    const own = events.filter((/** @type {any} */ e) => e.exercise === exercise);
    list("last", own.slice(0, 12).map((/** @type {any} */ e) => {
      const peak = e.peak && typeof e.peak.change_kt === "number" ? ", at most " + Math.abs(Math.round(e.peak.change_kt)) + " kt" : "";
      return el("a", { href: "/past/" + encodeURIComponent(e.id) }, timeOf(e.opened) + " UTC " + pathName(e.runway, e.operation) + ": " + kindWords(e.kind)[0].toLowerCase() + peak + ", level " + levelNumber((highest && highest[e.id]) || e.level));
    }).concat(own.length > 12 ? [el("a", { href: "/past" }, "and " + (own.length - 12) + " more")] : []), "No alert was opened. That does not mean no windshear.");
  } catch (e) {
    byId("last").replaceChildren(el("p", null, message(e)));
  }
  try {
    const { pilot_reports: reports } = await read("/api/v1/pilot-reports?from=" + time(from) + "&to=" + time(to));
    const { sheets } = await read("/api/v1/sheets?from=" + time(from) + "&to=" + time(to));
    list("notes", [
      ...(reports || []).slice(0, 8).map((/** @type {any} */ r) => timeOf(r.at) + " UTC pilot report, " + r.operation + " " + r.runway + ": " + (r.felt === "none" ? "nothing felt" : "a " + r.felt) + (r.text ? ". " + r.text : "")),
      ...(sheets || []).slice(0, 8).map((/** @type {any} */ s) => dayAndTime(s.at) + " UTC, " + s.who + ": " + (s.what === "daily" ? "daily check" : "hand-over") + (s.text ? ". " + s.text : "")),
    ], "None in this time.");
  } catch (e) {
    byId("notes").replaceChildren(el("p", null, message(e)));
  }
}

/** @param {unknown} e */
function message(e) {
  return e instanceof Error ? e.message : String(e);
}

/** The daily check ends with a signature; so does the change of a shift. */
function sign() {
  const host = byId("sign");
  if (!may("tower")) {
    host.replaceChildren(needs("To sign", "tower"));
    return;
  }
  const steps = ["Both sounds were heard", "The seconds of the clock move", "Every mast moves with the wind", "The wind agrees with the certified wind or the windsock"].map((words) => {
    const box = el("input", { type: "checkbox", required: true });
    const label = labelled(words, box);
    label.className = "inline";
    return label;
  });
  const note = el("input", { maxlength: 500 });
  const remark = el("input", { maxlength: 1000 });
  const again = () => { void ask(); };
  host.replaceChildren(
    el("h3", null, "Daily check"),
    entry([...steps, labelled("Remark", note, "wide")], "Sign the daily check",
      () => send("/api/v1/sheets", { what: "daily", text: (steps.map((s) => s.textContent).join("; ") + ". " + note.value).trim() }), again),
    el("h3", null, "Taking over"),
    entry([labelled("Remark", remark, "wide")], "Sign that I have taken over",
      () => send("/api/v1/sheets", { what: "handover", text: remark.value }), again));
}

live({
  step,
  blank(why) {
    asked = false;
    for (const id of ["open", "shelved", "out"]) byId(id).replaceChildren(el("p", null, "No information. " + why));
  },
});
