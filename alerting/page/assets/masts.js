// Takes what is known of every mast and shows it: its state, the wind it
// measures, the gaps of the last hours, how it compares with its neighbours,
// its book, and the last payload that was rejected, with the reason.

import { byId, el, keyed, setText, svg } from "./dom.js";
import { read } from "./ask.js";
import { live } from "./live.js";
import { knot } from "./ground.js";
import { mastSign } from "./signs.js";
import { bearing, dayAndTime, lasting, stateWords, timeOf } from "./words.js";

let known = false;
/** @type {Map<string, any>} what the list of stations adds to a step, by id */
let further = new Map();

/** @param {string} name @param {string} value @returns {HTMLElement[]} */
function fact(name, value) {
  return value === "" ? [] : [el("dt", null, name), el("dd", null, value)];
}

/** @param {any} w the wind object of a mast @returns {string} */
function windTold(w) {
  const two = w && w.two_minutes;
  if (!two) return "no two minutes of wind yet";
  const kt = (/** @type {number} */ ms) => Math.round(ms / knot);
  return "from " + bearing(two.from_deg) + "° true at " + kt(two.speed_ms) + " kt over two minutes, from " + kt(two.min_ms) + " to " + kt(two.max_ms) + " kt";
}

/** @param {any} n how a mast compares with its neighbours */
function neighbours(n) {
  if (!n || (!n.turned_deg && !n.speed_ratio)) return "not known yet: it takes half a day of wind" + (n && n.hours ? ", and " + n.hours + " h have been heard" : "");
  const out = [];
  if (n.turned_deg) {
    const [low, mid, high] = n.turned_deg;
    const side = (/** @type {number} */ v) => Math.abs(v).toFixed(0) + "° " + (v < 0 ? "counterclockwise" : "clockwise");
    out.push("turned by " + side(mid) + " (" + side(low) + " to " + side(high) + ")");
  }
  if (n.speed_ratio) {
    const [low, mid, high] = n.speed_ratio;
    out.push("reads " + mid.toFixed(2) + " of the speed of its neighbours (" + low.toFixed(2) + " to " + high.toFixed(2) + ")");
  }
  if (n.named && n.named.length) out.push("named: " + n.named.map(stateWords).join(", "));
  return out.join("; ");
}

/** @param {any} b */
function book(b) {
  if (!b) return [];
  return [...fact("Model", b.model || ""), ...fact("Serial number", b.serial || ""), ...fact("Installed", b.installed || ""),
    ...fact("Calibrated", b.calibrated || ""), ...fact("Next due", (b.next_due || "") + (b.overdue ? ", overdue" : "")), ...fact("Notes in the book", b.notes || "")];
}

/**
 * The gaps as a bar over the time they are known for, and in words.
 * @param {any} more
 * @returns {HTMLElement[]}
 */
function gaps(more) {
  const list = more && Array.isArray(more.gaps) ? more.gaps : null;
  if (!list) return [];
  const end = Date.parse(more.gaps_until || new Date().toISOString());
  const begin = Date.parse(more.gaps_from || new Date(end - 12 * 3600000).toISOString());
  const bar = svg("svg", { class: "gap-bar", viewBox: "0 0 1000 18", preserveAspectRatio: "none", "aria-hidden": "true" },
    svg("rect", { class: "held", x: 0, y: 0, width: 1000, height: 18 }));
  let missed = 0;
  for (const g of list) {
    const from = Math.max(begin, Date.parse(g.from));
    const to = Math.min(end, g.to ? Date.parse(g.to) : end);
    if (!(to > from)) continue;
    missed += (to - from) / 1000;
    const x = ((from - begin) / (end - begin)) * 1000;
    bar.append(svg("rect", { class: "missed", x, y: 0, width: Math.max(2, ((to - from) / (end - begin)) * 1000), height: 18 }));
  }
  const words = list.length === 0 ? "none since " + dayAndTime(begin) + " UTC" : list.length + " since " + dayAndTime(begin) + " UTC, " + lasting(missed) + " in all; the last from " + timeOf(list[list.length - 1].from) + " UTC";
  return [el("dt", null, "Gaps"), el("dd", null, words, bar)];
}

/** @param {any} s */
function update(/** @type {HTMLElement} */ node, s) {
  const more = further.get(s.id) || {};
  const sign = /** @type {Element} */ (node.querySelector(".mast-mark"));
  if (sign.getAttribute("data-state") !== s.state) {
    sign.setAttribute("data-state", s.state);
    sign.replaceChildren(mastSign(15, 15, s.state));
  }
  setText(/** @type {Element} */ (node.querySelector(".mast-state")), stateWords(s.state) + (s.age_s === null || s.age_s === undefined ? "" : ", newest reading " + Number(s.age_s).toFixed(1) + " s old"));
  const facts = [
    ...fact("Wind", windTold(s.wind)),
    ...fact("Received", s.messages + " messages: " + s.readings + " readings used, " + s.suspect + " suspect, " + s.rejected + " rejected"),
    ...gaps(more),
    ...fact("Beside its neighbours", neighbours(s.neighbours)),
    ...fact("Its clock", clock(s.clock)),
    ...fact("Maintenance", s.maintenance ? "from " + dayAndTime(s.maintenance.from) + " to " + dayAndTime(s.maintenance.to) + " UTC: " + s.maintenance.reason : ""),
    ...book(s.book),
  ];
  const dl = /** @type {Element} */ (node.querySelector("dl"));
  const text = facts.map((f) => f.textContent).join("\n");
  if (dl.textContent !== text.replaceAll("\n", "")) dl.replaceChildren(...facts);
  keyed(/** @type {Element} */ (node.querySelector(".findings")), (s.findings || []).map((/** @type {string} */ f) => ({ f })), (x) => x.f, (x) => el("li", null, x.f), () => {});
  const rejected = /** @type {HTMLElement} */ (node.querySelector(".rejected"));
  const why = more.rejected_why || s.problem || "";
  rejected.hidden = why === "";
  if (!why) return;
  setText(rejected.children[0], "The last payload that was rejected" + (more.rejected_at ? ", at " + dayAndTime(more.rejected_at) + " UTC" : "") + ": " + why);
  const payload = typeof more.rejected_payload === "string" ? more.rejected_payload : "";
  /** @type {HTMLElement} */ (rejected.children[1]).hidden = payload === "";
  setText(rejected.children[1], payload);
}

/** @param {any} c */
function clock(c) {
  if (!c || c.ahead_s === null || c.ahead_s === undefined) return "";
  const by = Math.abs(c.ahead_s).toFixed(2) + " s " + (c.ahead_s < 0 ? "behind" : "ahead");
  return by + (c.off ? ": it is wrong" : "");
}

/** @param {any} s */
function make(s) {
  return el("article", { class: "panel mast-card" },
    el("h2", null, svg("svg", { class: "mast-mark", viewBox: "0 0 30 30", "aria-hidden": "true" }), el("span", null, s.id), el("span", { class: "mast-state read" })),
    el("ul", { class: "findings" }), el("dl"),
    el("div", { class: "rejected", hidden: true }, el("p"), el("pre", { class: "payload", hidden: true })));
}

/** What changes slowly is asked for once in a while. */
async function ask() {
  try {
    const answer = await read("/api/v1/stations");
    further = new Map(answer.stations.map((/** @type {any} */ s) => [s.id, s]));
  } catch {
    return; // the steps say what is wrong
  }
}

live({
  step(body) {
    if (!known) {
      known = true;
      void ask();
    }
    const out = body.masts_out || [];
    setText(byId("masts-told"), body.stations.length === 0 ? "No mast is configured." : out.length === 0 ? "All " + body.stations.length + " masts serve ground now." : out.length + " of " + body.stations.length + " masts serve no ground now: " + out.join(", ") + ".");
    keyed(byId("masts"), body.stations, (/** @type {any} */ s) => s.id, make, update);
  },
  blank(why) {
    setText(byId("masts-told"), "No information. " + why);
    byId("masts").replaceChildren();
    known = false;
  },
});
window.setInterval(() => void ask(), 15000);
