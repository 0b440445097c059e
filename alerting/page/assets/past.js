// Takes a span of time, a path, a level and a cause, and shows the events that
// fit, with the statistics, what-if results and pilot reports of that time.
// Next is event.js, for one of them.

import { byId, el } from "./dom.js";
import { read } from "./ask.js";
import { live } from "./live.js";
import { otherLevels, statistics } from "./figures.js";
import { pilotReport } from "./forms.js";
import { dayAndTime, kindWords, lasting, levelWords, pathName } from "./words.js";

const exercise = document.body.dataset.exercise === "true";
const apart = document.body.dataset.live === "false";

/** @param {string} id */
const field = (id) => /** @type {HTMLInputElement} */ (byId(id));

/** @param {unknown} e */
const message = (e) => (e instanceof Error ? e.message : String(e));

/** The span that is asked for, as the API takes it. */
function span() {
  const part = (/** @type {string} */ id) => {
    const value = field(id).value;
    return value === "" ? "" : "&" + id + "=" + encodeURIComponent((value.length === 16 ? value + ":00" : value) + "Z");
  };
  return part("from") + part("to");
}

async function show() {
  const told = byId("events-told");
  const table = byId("events");
  told.textContent = "Loading the events.";
  try {
    const { events, highest_level: highest } = await read("/api/v1/events?limit=1000" + span() + wanted());
    choices(events);
    const fit = events.filter((/** @type {any} */ e) => e.exercise === exercise);
    told.textContent = fit.length === 0 ? "No event fits. That does not mean that there was no windshear." :
      fit.length + (fit.length === 1 ? " event" : " events") + (events.length === 1000 ? ", of the newest 1000 that are listed at once" : "") + ".";
    /** @type {Element} */ (table.querySelector("tbody")).replaceChildren(...fit.map((/** @type {any} */ e) => row(e, (highest && highest[e.id]) || e.level)));
    table.hidden = fit.length === 0;
    const others = events.length - fit.length;
    byId("apart").replaceChildren(others === 0 ? "" : apart ? el("a", { href: "/past" }, "The record of real weather is shown apart.") :
      exercise ? others + " events of real weather are not shown here." :
        el("a", { href: "/past?record=exercise" }, others + " events of exercises are shown apart."));
  } catch (e) {
    told.textContent = "The events could not be read. " + message(e);
    table.hidden = true;
  }
}

/** The path, level and cause that are asked for, as the API takes them. */
function wanted() {
  const [runway, operation] = field("path").value.split(" ");
  const words = ["", "noticeable", "large", "beyond-margin"];
  const least = words[Number(field("level").value)];
  const cause = field("cause").value;
  return (runway ? "&runway=" + encodeURIComponent(runway) + "&operation=" + encodeURIComponent(operation) : "") +
    (least === "noticeable" ? "" : "&level=" + least) + (cause ? "&cause=" + encodeURIComponent(cause) : "");
}

/** @param {any} e @param {string} highest its highest level */
function row(e, highest) {
  const lasted = e.closed ? lasting((Date.parse(e.closed) - Date.parse(e.opened)) / 1000) : "open";
  const peak = e.peak && typeof e.peak.change_kt === "number" ? kindWords(e.kind)[0] + " by about " + Math.abs(Math.round(e.peak.change_kt)) + " kt" : e.text;
  const address = "/past/" + encodeURIComponent(e.id) + (apart ? "?record=exercise" : "");
  return el("tr", null, el("td", null, el("a", { href: address }, dayAndTime(e.opened))), el("td", null, lasted), el("td", null, pathName(e.runway, e.operation)),
    el("td", null, levelWords(highest)), el("td", null, (e.cause || "").replaceAll("-", " ")), el("td", null, peak));
}

/** The paths that there are, beside those already in the list. @param {any[]} events */
function choices(events) {
  const select = field("path");
  const had = new Set(Array.from(/** @type {any} */ (select).options, (/** @type {HTMLOptionElement} */ o) => o.value));
  for (const e of events) {
    const value = e.runway + " " + e.operation;
    if (had.has(value)) continue;
    had.add(value);
    select.append(el("option", { value }, pathName(e.runway, e.operation)));
  }
}

/**
 * @param {string} id @param {string} address
 * @param {(answer: any) => Node[]} draw
 */
async function part(id, address, draw) {
  const host = byId(id);
  try {
    host.replaceChildren(...draw(await read(address)));
  } catch (e) {
    host.replaceChildren(el("p", null, message(e)));
  }
}

async function reports() {
  const host = byId("reports");
  try {
    const { pilot_reports: list } = await read("/api/v1/pilot-reports?" + span().slice(1));
    host.replaceChildren(list && list.length ? el("ul", null, ...list.map((/** @type {any} */ r) => el("li", null, told(r)))) : el("p", null, "No pilot report is recorded for this time."));
  } catch (e) {
    host.replaceChildren(el("p", null, message(e)));
  }
}

/** A pilot report in words. @param {any} r */
function told(r) {
  const amount = r.amount_kt ? " of about " + Math.round(r.amount_kt) + " kt" : "";
  return dayAndTime(r.at) + " UTC, " + pathName(r.runway, r.operation).toLowerCase() + ": " + (r.felt === "none" ? "nothing was felt" : "a " + r.felt + " of airspeed" + amount) +
    (r.go_around ? ", went around" : "") + (r.aircraft ? ", " + r.aircraft : "") + "." + (r.text ? " " + r.text : "");
}

async function all() {
  const asked = span();
  await show();
  await Promise.all([
    part("statistics", "/api/v1/statistics" + (asked ? "?" + asked.slice(1) : ""), statistics),
    part("whatif", "/api/v1/what-if", otherLevels),
    reports(),
  ]);
}

let begun = false;

/** @param {string} at the newest time that is known */
function begin(at) {
  if (begun) return;
  begun = true;
  const now = new Date(at);
  field("to").value = new Date(now.getTime() + 60000).toISOString().slice(0, 19);
  field("from").value = new Date(now.getTime() - 7 * 86400000).toISOString().slice(0, 19);
  const runways = () => Array.from(new Set(Array.from(/** @type {any} */ (field("path")).options, (/** @type {HTMLOptionElement} */ o) => o.value.split(" ")[0]).filter(Boolean)));
  void all().then(() => pilotReport(byId("report"), runways(), { at: () => now, after: () => void reports() }));
}

byId("query").addEventListener("submit", (e) => {
  e.preventDefault();
  void all();
});
// The record of exercises is not live: it has no stream, and ends now.
if (apart) begin(new Date().toISOString());
else live({ step: (body) => begin(body.at), blank: () => begin(new Date().toISOString()) });
