// Takes the statistics of a time, or what other levels would have given, and
// shows them as tables with their intervals. Next is past.js.

import { el } from "./dom.js";
import { dayAndTime, lasting, pathName } from "./words.js";

/** @param {number | null | undefined} v @param {number} [digits] */
function number(v, digits = 1) {
  if (v === null || v === undefined) return "not known";
  if (Number.isInteger(v)) return String(v);
  return Math.abs(v) >= 100 ? v.toFixed(0) : Math.abs(v) < 0.1 ? v.toFixed(3) : v.toFixed(digits);
}

/** @param {number | null | undefined} v */
const percent = (v) => (v === null || v === undefined ? "not known" : (100 * v).toFixed(1) + " %");

/** A share with its interval of 95 %, and what it is a share of. @param {any} i */
function interval(i) {
  if (!i || i.value === null) return "not known" + (i && i.of === 0 ? ", of none" : "");
  return percent(i.value) + " (" + percent(i.low) + " to " + percent(i.high) + "), of " + i.of;
}

/** @param {string} caption @param {string[]} heads @param {(string | Node)[][]} rows @param {string} [none] */
function table(caption, heads, rows, none) {
  if (rows.length === 0) return el("div", { class: "figure" }, el("h3", null, caption), el("p", null, none || "None."));
  return el("div", { class: "figure scroll", tabindex: 0, role: "group", "aria-label": caption }, el("h3", null, caption),
    el("table", { class: "list" }, el("thead", null, el("tr", null, ...heads.map((h) => el("th", { scope: "col" }, h)))),
      el("tbody", null, ...rows.map((r) => el("tr", null, ...r.map((c) => el("td", null, c)))))));
}

/** @param {string} caption @param {any[]} rates */
function rates(caption, rates) {
  return table(caption, ["Of", "Alerts", "Per 100 hours"], (rates || []).map((r) => [r.name.replaceAll("-", " ").replace("take off", "take-off"), number(r.alerts), number(r.per_100_hours)]));
}

/** @param {string} name @param {string} value */
const fact = (name, value) => [el("dt", null, name), el("dd", null, value)];

/** Statistics of a time. @param {any} s @returns {Node[]} */
export function statistics(s) {
  const a = s.attention || {};
  /** @type {Node[]} */
  const out = [el("dl", null,
    ...fact("Time", dayAndTime(s.from) + " to " + dayAndTime(s.to) + " UTC"),
    ...fact("Judged", number(s.hours_judged) + " hours, " + percent(s.share_judged) + " of it"),
    ...fact("Alerts", number(s.alerts) + " in " + number(s.occurrences) + " occurrences; " + number(s.alerts_per_100_hours) + " per 100 hours"),
    ...fact("Acknowledged", interval(a.acknowledged)),
    ...fact("Time to acknowledge", a.median_s === null || a.median_s === undefined ? "not known" : "half within " + lasting(a.median_s) + ", nine of ten within " + lasting(a.ninetieth_s)),
    ...fact("Shelved, notes", number(a.shelved) + ", " + number(a.notes)))];
  const grid = el("div", { class: "figures" }, rates("By path", s.by_path), rates("By highest level", s.by_level), rates("By kind", s.by_kind), rates("By cause", s.by_cause),
    rates("By hour of the day (UTC)", (s.by_hour || []).filter((/** @type {any} */ h) => h.alerts > 0)), rates("By month", s.by_month));
  out.push(grid, table("Masts", ["Mast", "There", "Late or rejected", "Gaps", "Longest"], (s.stations || []).map((/** @type {any} */ m) => [m.id, percent(m.share), number(m.late), number(m.gaps), lasting(m.longest_gap_s)])));
  const load = s.load || {};
  out.push(table("How much people are asked to look at", ["Figure", "Is", "Acceptable", "At most", "Remark"], (load.figures || []).map((/** @type {any} */ f) => [f.name, number(f.value, 2) + " " + f.unit, f.acceptable === null ? "" : number(f.acceptable, 2), f.most === null ? "" : number(f.most, 2), f.within ? "" : "above what is acceptable"])));
  if (load.source) out.push(el("p", { class: "read" }, "Acceptable figures after " + load.source + "."));
  out.push(...verification(s.verification));
  out.push(table("The greatest changes", ["Opened (UTC)", "Path", "Change", "Highest level", "Cause"], (s.largest || []).map((/** @type {any} */ l) => [
    el("a", { href: "/past/" + encodeURIComponent(l.id) }, dayAndTime(l.opened)), pathName(l.runway, l.operation), (l.peak_kt < 0 ? "falls " : "rises ") + Math.abs(Math.round(l.peak_kt)) + " kt", l.level.replaceAll("-", " "), (l.cause || "").replaceAll("-", " ")])));
  if (s.faults && s.faults.length) out.push(el("p", null, "What could not be read: " + s.faults.join("; ") + "."));
  return out;
}

/** Alerts beside what crews reported. @param {any} v @returns {Node[]} */
function verification(v) {
  if (!v) return [];
  const rows = (v.by_level || []).map((/** @type {any} */ l) => {
    const t = l.table || {}, s = l.scores || {};
    return [l.level.replaceAll("-", " "), number(t.hits), number(t.misses), number(t.false_alarms), number(t.correct_nulls), interval(s.pod), interval(s.far)];
  });
  return [table("Beside pilot reports", ["Level", "Told and felt", "Felt, not told", "Told, not felt", "Neither", "Of what was felt, told", "Of what was told, not felt"], rows),
    el("p", { class: "read" }, number(v.reports) + " reports; " + number(v.alerts_unverified) + " alerts that nobody reported on. " + (v.method || ""))];
}

/** What other levels would have given. @param {any} w @returns {Node[]} */
export function otherLevels(w) {
  return [el("p", null, dayAndTime(w.from) + " to " + dayAndTime(w.to) + " UTC, " + number(w.hours_judged) + " hours judged. What is judged again is the change that was worked out then."),
    table("Levels", ["Levels", "Alerts", "Of level 1", "Of level 2", "Of level 3", "Per 100 hours", "Minutes open", "Remark"], (w.variants || []).map((/** @type {any} */ v) => [
      v.name, number(v.alerts[0]), number(v.alerts[1]), number(v.alerts[2]), number(v.alerts[3]), number(v.alerts_per_100_hours), number(v.open_minutes), v.in_force ? "in force" : v.exact ? "" : "between two sizes that are kept"])),
    ...(w.faults && w.faults.length ? [el("p", null, "What could not be read: " + w.faults.join("; ") + ".")] : [])];
}
