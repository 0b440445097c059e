// Takes one event: what was told of it, what people said about it, and the wind
// of every second around it, which can be played back on the plan, along the
// path and mast by mast.

import { byId, el, setText } from "./dom.js";
import { may, read, send } from "./ask.js";
import { live } from "./live.js";
import { knot } from "./ground.js";
import { Plan } from "./plan.js";
import { drawProfile } from "./profile.js";
import { Series } from "./series.js";
import { entry, labelled, needs, noteEntry, pilotReport } from "./forms.js";
import { bearing, closingWords, dayAndTime, kindWords, lasting, levelWords, pathName, timeOf } from "./words.js";

const id = document.body.dataset.id || "";
const address = "/api/v1/events/" + encodeURIComponent(id);

/**
 * One second of a playback: like a step of the stream, with less in it.
 * @typedef {object} Second
 * @property {string} at
 * @property {any[]} [stations] id, state, and the wind: speed_kt and from_true_deg
 * @property {any[]} [profiles]
 * @property {any[]} [paths]
 * @property {any[]} [alerts]
 */

/** @param {unknown} e */
const message = (e) => (e instanceof Error ? e.message : String(e));

/** @type {any[]} */
let issues = [];
/** @type {Second[]} */
let seconds = [];
/** @type {any} */
let layout = null;
/** @type {Plan | null} */
let plan = null;
/** @type {Series | null} */
let series = null;
let playing = 0;

async function begin() {
  try {
    const answer = await read(address);
    issues = answer.issues;
  } catch (e) {
    byId("summary").replaceChildren(el("p", { role: "status" }, "The event could not be read. " + message(e)));
    return;
  }
  summary();
  told(false);
  downloads();
  void people();
  void playback();
}

function summary() {
  const first = issues[0], last = issues[issues.length - 1];
  const greatest = issues.reduce((best, i) => (Math.abs(i.change_kt || 0) > Math.abs(best.change_kt || 0) ? i : best), first);
  const lasted = last.closed ? lasting((Date.parse(last.closed) - Date.parse(first.opened)) / 1000) : "it is open";
  byId("summary").replaceChildren(
    el("h2", null, kindWords(first.kind)[0] + ", " + pathName(first.runway, first.operation)),
    el("p", { class: "sentence-then" }, greatest.text),
    el("dl", null,
      el("dt", null, "Opened"), el("dd", null, dayAndTime(first.opened) + " UTC"),
      el("dt", null, "Lasted"), el("dd", null, lasted + (last.closed ? "; it closed since " + closingWords(last.closed_because) : "")),
      el("dt", null, "Level at its greatest"), el("dd", null, levelWords(greatest.level)),
      el("dt", null, "Cause"), el("dd", null, (greatest.cause || "not known").replaceAll("-", " ")),
      el("dt", null, "Rests on"), el("dd", null, greatest.stations ? (greatest.stations.used || []).join(", ") + ((greatest.stations.missing || []).length ? "; missing: " + greatest.stations.missing.join(", ") : "") : "not known"),
      el("dt", null, "Id"), el("dd", null, id)));
}

/** @param {any} i an issue */
const timeOfIssue = (i) => (i.state === "closed" ? i.closed || i.updated : i.updated);

/**
 * Shows what was told: the opening, each change of level or of what is
 * observed, the greatest and the closing; everything where it is asked for.
 * @param {boolean} whole
 */
function told(whole) {
  const greatest = issues.reduce((best, i) => (Math.abs(i.change_kt || 0) > Math.abs(best.change_kt || 0) ? i : best), issues[0]);
  const some = issues.filter((i, n) => whole || n === 0 || i === greatest || i.state === "closed" || i.level !== issues[n - 1].level || i.observed !== issues[n - 1].observed);
  /** @type {Element} */ (byId("issues").querySelector("tbody")).replaceChildren(...some.map((i) => el("tr", null,
    el("td", null, timeOf(timeOfIssue(i))), el("td", null, i.state + (i.state === "closed" ? ", since " + closingWords(i.closed_because) : "")),
    el("td", null, levelWords(i.level)), el("td", null, i.text))));
  const more = byId("issues-more");
  more.replaceChildren(some.length < issues.length || whole ? el("button", { type: "button", onclick: () => told(!whole) }, whole ? "Show the main ones only" : "Show all " + issues.length) : "");
}

/** Everything that people said about it. */
async function people() {
  const host = byId("people");
  const again = () => void people();
  try {
    const answer = await read(address + "/notes");
    const list = answer.notes || answer.entries || [];
    host.replaceChildren(...(list.length ? list.map((/** @type {any} */ n) => el("li", null, said(n))) : [el("li", null, "Nobody has said anything about it yet.")]));
  } catch (e) {
    host.replaceChildren(el("li", null, message(e)));
  }
  noteEntry(byId("note"), id, again);
  const first = issues[0];
  pilotReport(byId("report"), [first.runway], { event: id, at: () => new Date(first.opened), after: again });
}

/** One thing that somebody did or said. @param {any} n */
function said(n) {
  const when = n.at ? dayAndTime(n.at) + " UTC" : "";
  const who = n.who ? ", " + n.who : "";
  if (n.felt) return when + who + ": pilot report, " + (n.felt === "none" ? "nothing was felt" : "a " + n.felt + " of airspeed" + (n.amount_kt ? " of about " + Math.round(n.amount_kt) + " kt" : "")) + (n.text ? ". " + n.text : "");
  const what = n.kind === "acknowledgement" ? "acknowledged" : n.kind === "shelving" ? (n.ended ? "taken off the shelf" + (n.why ? ", " + n.why : "") : "shelved: " + (n.reason || "")) : n.kind === "hold" ? (n.released ? "hold released: " : "held: ") + (n.reason || "") : "";
  return when + who + ": " + [what, n.text].filter(Boolean).join(" ");
}

function downloads() {
  const link = (/** @type {string} */ path, /** @type {string} */ words) => el("li", null, el("a", { class: "button", href: address + path, download: true }, words));
  // Exports are for officers, where there are users at all.
  if (document.body.dataset.users === "true" && !may("officer")) byId("downloads").replaceChildren(el("li", null, needs("A download", "officer")));
  else byId("downloads").replaceChildren(link("/report", "Report (HTML)"), link("/csv", "Readings and issues (CSV)"), link("/bundle", "Bundle with readings, configuration and digests"));
  const host = byId("hold");
  if (!may("officer")) {
    host.replaceChildren(needs("To hold the readings of this event", "officer"));
    return;
  }
  const reason = el("input", { required: true, maxlength: 200 });
  host.replaceChildren(entry([labelled("Keep its readings from being deleted, because", reason, "wide")], "Hold",
    () => send("/api/v1/holds", { event: id, reason: reason.value }), null));
}

/** The wind around the event, and what can be done with it. */
async function playback() {
  const panel = byId("play-panel");
  try {
    const answer = await read(address + "/playback");
    seconds = answer.steps || [];
    layout = answer.layout || (await read("/api/v1/layout")).layout;
  } catch (e) {
    panel.hidden = false;
    panel.replaceChildren(el("h2", null, "How it went"), el("p", null, "It cannot be played back. " + message(e)));
    return;
  }
  panel.hidden = false;
  if (seconds.length === 0) {
    panel.replaceChildren(el("h2", null, "How it went"), el("p", null, "No readings are kept of this time."));
    return;
  }
  plan = new Plan(byId("plan"));
  plan.choose({ operation: issues[0].operation });
  plan.setLayout(layout);
  const range = /** @type {HTMLInputElement} */ (byId("at"));
  range.max = String(seconds.length - 1);
  const opened = Date.parse(issues[0].opened);
  const start = seconds.findIndex((s) => Date.parse(s.at) >= opened);
  range.value = String(Math.max(0, start));
  range.addEventListener("input", () => moment());
  byId("play").addEventListener("click", toggle);
  const shown = /** @type {HTMLSelectElement} */ (byId("masts-shown"));
  const ids = Array.from(new Set(seconds.flatMap((s) => (s.stations || []).map((m) => m.id))));
  shown.replaceChildren(...ids.map((m) => el("option", { value: m }, m)));
  shown.addEventListener("change", curves);
  series = new Series(byId("series"), [{ label: "Speed (kt)", token: "--ink" }, { label: "Along the path (kt)", token: "--rise", dash: [8, 4] }], { height: 200, value: (v) => (v < 0 ? "tail " : "") + Math.abs(Math.round(v)), moved: (s) => {
    range.value = String(Math.max(0, seconds.findIndex((x) => Date.parse(x.at) / 1000 >= s)));
    moment();
  } });
  curves();
  moment();
}

/** The speed at the chosen mast, and its part along the path of the event. */
function curves() {
  const mast = /** @type {HTMLSelectElement} */ (byId("masts-shown")).value;
  const path = layout.paths.find((/** @type {any} */ p) => p.runway === issues[0].runway && p.operation === issues[0].operation);
  const of = (/** @type {Second} */ s) => (s.stations || []).find((m) => m.id === mast);
  const speed = seconds.map((s) => { const m = of(s); return m && typeof m.speed_kt === "number" ? m.speed_kt : null; });
  const along = seconds.map((s) => {
    const m = of(s);
    return !path || !m || typeof m.speed_kt !== "number" ? null : m.speed_kt * Math.cos(((m.from_true_deg - path.bearing_true_deg) * Math.PI) / 180);
  });
  if (series) series.set([seconds.map((s) => Math.round(Date.parse(s.at) / 1000)), speed, along]);
}

/** Shows the second that is chosen. */
function moment() {
  const range = /** @type {HTMLInputElement} */ (byId("at"));
  const second = seconds[Number(range.value)];
  if (!second || !plan) return;
  setText(byId("at-told"), dayAndTime(second.at) + " UTC");
  range.setAttribute("aria-valuetext", dayAndTime(second.at) + " UTC");
  const now = Date.parse(second.at);
  const before = issues.filter((i) => Date.parse(timeOfIssue(i)) <= now);
  const issue = before[before.length - 1];
  setText(byId("then"), !issue ? "Nothing had been told yet." : issue.state === "closed" ? "It had closed, since " + closingWords(issue.closed_because) + "." : issue.text);
  const alerts = second.alerts || (issue && issue.state === "open" ? [issue] : []);
  const body = { ...second, alerts, stations: (second.stations || []).map(windOf), paths: second.paths || [] };
  plan.draw(body);
  const path = body.paths.find((p) => p.runway === issues[0].runway && p.operation === issues[0].operation) || { runway: issues[0].runway, operation: issues[0].operation, state: alerts.length ? "raised" : "", observed: [] };
  const same = (/** @type {any} */ p) => p.runway === path.runway && p.operation === path.operation;
  byId("profile").replaceChildren(drawProfile(path, layout.paths.find(same), (second.profiles || []).find(same), alerts, Math.max(200, byId("profile").clientWidth - 4)),
    el("p", { class: "read" }, (second.stations || []).filter((m) => typeof m.speed_kt === "number").map((m) => m.id + ": " + bearing(m.from_true_deg) + "° true, " + Math.round(m.speed_kt) + " kt").join("; ")));
  if (series) series.point(now / 1000);
}

/** A mast as a step of the stream has it. @param {any} m */
function windOf(m) {
  if (m.wind || typeof m.speed_kt !== "number") return { state: "unknown", live: false, ...m };
  return { state: "live", live: true, ...m, wind: { two_minutes: { speed_ms: m.speed_kt * knot, from_deg: m.from_true_deg } } };
}

/** Ten seconds pass in one. */
function toggle() {
  const range = /** @type {HTMLInputElement} */ (byId("at"));
  if (playing) {
    window.clearInterval(playing);
    playing = 0;
  } else {
    if (Number(range.value) >= seconds.length - 1) range.value = "0";
    playing = window.setInterval(() => {
      range.value = String(Number(range.value) + 1);
      moment();
      if (Number(range.value) >= seconds.length - 1) toggle();
    }, 100);
  }
  setText(byId("play"), playing ? "Stop" : "Play");
}

if (document.body.dataset.live === "true") live({});
void begin();
