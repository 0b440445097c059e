// Takes occurrences with their alerts and shows each as one sentence, the
// largest change first, with what may be done about it. Next is now.js.

import { byId, el, keyed, setText } from "./dom.js";
import { may, send } from "./ask.js";
import { choice, entry, labelled, shelfTimes } from "./forms.js";
import { amountOf, kindWords, levelNumber, levelWords, timeOf } from "./words.js";

/**
 * @typedef {object} Shown one occurrence as it is shown
 * @property {any} occurrence
 * @property {any[]} alerts the worst first; empty once it has ended
 */

/**
 * Occurrences with their alerts, the worst first. Alerts that belong to none are
 * shown on their own: an alert is never left out.
 * @param {any} body a step
 * @returns {Shown[]}
 */
export function occurrencesOf(body) {
  /** @type {Map<string, any>} */
  const alerts = new Map((body.alerts || []).map((/** @type {any} */ a) => [a.id, a]));
  /** @type {Shown[]} */
  const out = [];
  for (const o of body.occurrences || []) {
    const own = o.alerts.map((/** @type {string} */ id) => alerts.get(id)).filter(Boolean);
    for (const a of own) alerts.delete(a.id);
    out.push({ occurrence: o, alerts: own });
  }
  for (const a of alerts.values()) {
    out.push({ occurrence: { id: a.occurrence || a.id, sentence: a.text, level: a.level, since: a.opened, trend: a.trend, alerts: [a.id], state: "raised-unseen", sound: "none", ended: null }, alerts: [a] });
  }
  const size = (/** @type {Shown} */ s) => Math.max(0, ...s.alerts.map((a) => Math.abs(a.change_kt || 0)));
  const open = (/** @type {Shown} */ s) => (s.alerts.length ? 1 : 0);
  return out.filter(worthShowing(body)).sort((x, y) => open(y) - open(x) || levelNumber(y.occurrence.level) - levelNumber(x.occurrence.level) || size(y) - size(x));
}

/**
 * What has ended stays until somebody has seen it. Where nobody can say so, it
 * stays for ten minutes.
 * @param {any} body
 * @returns {(s: Shown) => boolean}
 */
function worthShowing(body) {
  if (document.body.dataset.users === "true") return () => true;
  const now = Date.parse(body.at);
  return (s) => s.alerts.length > 0 || !s.occurrence.ended || now - Date.parse(s.occurrence.ended) < 600000;
}

/** @param {Shown} s */
function make(s) {
  const id = s.occurrence.id;
  const deeds = el("div", { class: "deeds" });
  const node = el("article", { class: "alert" },
    el("p", { class: "label" }, el("span", { class: "blink", "aria-hidden": "true" }), el("span", { class: "heading" })),
    el("p", { class: "sentence" }, el("span"), el("span", { class: "amount" }), el("span")),
    el("div", { class: "furthers" }),
    deeds);
  deeds.append(el("span", { class: "read status" }));
  if (!may("tower")) return node;
  const failed = el("span", { class: "failed", role: "alert", hidden: true });
  /** @param {() => Promise<any>} act */
  const attempt = async (act) => {
    failed.hidden = true;
    try {
      await act();
    } catch (e) {
      failed.textContent = e instanceof Error ? e.message : String(e);
      failed.hidden = false;
    }
  };
  const address = "/api/v1/occurrences/" + encodeURIComponent(id);
  const acknowledge = el("button", { class: "acknowledge", onclick: () => attempt(() => send(address + "/acknowledge", {})) }, "Acknowledge");
  const unshelve = el("button", { class: "unshelve", hidden: true, onclick: () => attempt(() => send(address + "/unshelve", {})) }, "Take off the shelf");
  const reason = el("input", { required: true, maxlength: 200, minlength: 3 });
  const end = choice(shelfTimes, "15");
  const form = entry([labelled("Reason", reason, "wide"), labelled("For", end)], "Shelve", async () => {
    // Counted from the program's own time: this computer's clock may be wrong.
    const until = new Date(serverTime() + Number(end.value) * 60000);
    await send(address + "/shelve", { reason: reason.value, until: until.toISOString().slice(0, 19) + "Z" });
  }, () => { form.hidden = true; shelve.setAttribute("aria-expanded", "false"); });
  form.hidden = true;
  const shelve = el("button", { class: "shelve", "aria-expanded": "false", onclick: () => {
    form.hidden = !form.hidden;
    shelve.setAttribute("aria-expanded", String(!form.hidden));
    if (!form.hidden) reason.focus();
  } }, "Shelve…");
  deeds.append(acknowledge, shelve, unshelve, failed, form);
  return node;
}

/** @type {() => number} */
let serverTime = () => Date.now();

/** Where the time of the program comes from. @param {() => number} from */
export function useServerTime(from) {
  serverTime = from;
}

/** @param {HTMLElement} node @param {Shown} s */
function update(node, s) {
  const { occurrence: o, alerts } = s;
  const worst = alerts[0];
  const [kind, side] = worst ? kindWords(worst.kind) : ["Has ended", "other"];
  const level = levelNumber(o.level);
  const unseen = worst && worst.observed === false;
  const wanted = "alert " + side + " level" + level + (unseen ? " unseen" : "") + (worst ? "" : " unseen ended");
  if (node.className !== wanted) node.className = wanted;
  const blink = /** @type {Element} */ (node.querySelector(".blink"));
  const raised = o.state === "raised-unseen" || o.state === "ended-unseen";
  blink.className = "blink " + (!raised ? "seen" : level === 3 && worst ? "fast" : "slow");
  const parts = [kind, levelWords(o.level), "since " + timeOf(o.since) + " UTC"];
  if (worst && o.trend && o.trend !== "unknown") parts.push(o.trend);
  if (unseen) parts.push("not observed now");
  if (o.ended) parts.push("ended " + timeOf(o.ended) + " UTC");
  setText(/** @type {Element} */ (node.querySelector(".heading")), parts.join(" · "));
  // What it is now is large while it lasts, and not afterwards.
  const text = o.sentence || (worst ? worst.text : "");
  const [before, amount, after] = worst ? amountOf(text) : [text, "", ""];
  const spans = /** @type {Element} */ (node.querySelector(".sentence")).children;
  [before, amount, after].forEach((text, i) => setText(spans[i], text));
  keyed(/** @type {Element} */ (node.querySelector(".furthers")), alerts.slice(1), (a) => a.id,
    () => el("p", { class: "further" }), (n, a) => setText(n, a.text));
  setText(/** @type {Element} */ (node.querySelector(".status")), status(o));
  buttons(node, o);
}

/** What people have done about it. @param {any} o */
function status(o) {
  const said = [];
  if (o.acknowledged_by) said.push("Acknowledged by " + o.acknowledged_by + (o.acknowledged_at ? " at " + timeOf(o.acknowledged_at) + " UTC" : "") + ".");
  else said.push("Not acknowledged.");
  if (o.shelved_until) said.push("Shelved until " + timeOf(o.shelved_until) + " UTC" + (o.shelved_by ? " by " + o.shelved_by : "") + ": " + (o.shelved_reason || "no reason given") + ".");
  return said.join(" ");
}

/** @param {HTMLElement} node @param {any} o */
function buttons(node, o) {
  const acknowledge = /** @type {HTMLButtonElement | null} */ (node.querySelector(".acknowledge"));
  if (!acknowledge) return;
  const done = Boolean(o.acknowledged_by) && o.state !== "raised-unseen";
  if (acknowledge.disabled !== done) acknowledge.disabled = done;
  setText(acknowledge, done ? "Acknowledged" : "Acknowledge");
  /** @type {HTMLElement} */ (node.querySelector(".shelve")).hidden = Boolean(o.shelved_until) || Boolean(o.ended);
  /** @type {HTMLElement} */ (node.querySelector(".unshelve")).hidden = !o.shelved_until;
}

/** @param {any} body a step @returns {Shown[]} */
export function showAlerts(body) {
  const shown = occurrencesOf(body);
  const host = byId("alerts");
  const head = byId("alerts-head");
  const open = shown.filter((s) => s.alerts.length > 0).length;
  setText(head, open === 0 ? "Alerts" : open === 1 ? "Alerts: 1 is open" : "Alerts: " + open + " are open, the largest first");
  if (shown.length === 0) {
    if (!host.querySelector(".none")) host.replaceChildren(el("p", { class: "none" }));
    setText(/** @type {Element} */ (host.querySelector(".none")), noneOpen(body.condition));
    return shown;
  }
  keyed(host, shown, (s) => s.occurrence.id, make, update);
  fit();
  return shown;
}

/** What it means that none is open. @param {string} condition */
function noneOpen(condition) {
  if (condition === "observing") return "No alert is open. That does not mean no windshear.";
  if (condition === "partly-observing") return "No alert is open on what is observed. That does not mean no windshear.";
  return "Nothing is observed, so nothing can be told. That does not mean no windshear.";
}

/**
 * The largest change is told in full size. Where the others do not fit below
 * it, they are told smaller, and where even that does not fit, by scrolling.
 */
function fit() {
  const panel = byId("alerts-panel");
  panel.classList.remove("tight");
  if (panel.scrollHeight > panel.clientHeight + 2) panel.classList.add("tight");
}
