// Takes steps and shows the view that tower staff leave open: the glance first,
// then what there is to look at. Next are alerts.js, plan.js and profile.js,
// which draw, and sound.js.

import { byId, el, keyed, mark, setText } from "./dom.js";
import { may, read, send } from "./ask.js";
import { live } from "./live.js";
import { showAlerts, useServerTime } from "./alerts.js";
import { Plan, changeColour } from "./plan.js";
import { drawProfile } from "./profile.js";
import { Series } from "./series.js";
import { Sound, soundDue } from "./sound.js";
import { screenSettings } from "./screen.js";
import { choice, labelled, pilotReport } from "./forms.js";
import { bearing, closingWords, conditionOrder, conditionWords, headwind, kindWords, knots, levelNumber, pathName, stateWords, timeOf } from "./words.js";

/** @type {any} */
let layout = null;
let layoutAsked = "";
/** @type {any} */
let last = null; // the newest step; null while there is no information
let stepTime = 0; // of the program, in ms
let stepSeen = 0; // by this browser's running time

// An exercise runs by its own time; live steps by the host's.
const serverNow = () => stepTime + (performance.now() - stepSeen);
useServerTime(serverNow);

const sound = new Sound(() => { if (last) items(last); });
const plan = new Plan(byId("plan"));

/** @param {any} body */
function step(body) {
  last = body;
  stepTime = Date.parse(body.exercise ? body.at : body.made || body.at);
  stepSeen = performance.now();
  const words = document.getElementById("words");
  if (words) {
    words.remove();
    byId("glass").hidden = false;
    screenSettings(byId("screen"));
  }
  byId("gone").hidden = true;
  wind();
  strip(body);
  const shown = showAlerts(body);
  sound.want(soundDue(shown.map((s) => s.occurrence)));
  ends(body);
  items(body);
  askLayout(body);
  plan.draw(body);
  told(body);
  profiles(body);
  paths(body);
  remember(body);
}

/** Winds up the watch that runs in the style sheet. */
function wind() {
  const glass = byId("glass");
  glass.dataset.beat = glass.dataset.beat === "a" ? "b" : "a";
}

/** @param {any} body */
function strip(body) {
  const [word, , meaning] = conditionWords(body.condition);
  rail(body.condition);
  setText(byId("condition"), word);
  setText(byId("meaning"), meaning);
  const age = body.age_s;
  setText(byId("age"), age === null || age === undefined ? "No input in use" : "Oldest input " + Number(age).toFixed(1) + " s old");
  clock();
}

/** The condition by place: each has its own on the rail. @param {string} condition */
function rail(condition) {
  const host = byId("rail");
  if (host.dataset.condition === condition) return;
  host.dataset.condition = condition;
  host.replaceChildren(...conditionOrder.map((c) => {
    const here = c === condition;
    return el("li", { class: here ? "here" : null }, here ? mark(conditionWords(c)[1]) : null);
  }));
}

function clock() {
  setText(byId("clock"), last ? timeOf(serverNow()) + " UTC" : "no time");
}

/** @type {HTMLElement | null} */
let runwayField = null;

/** @type {Record<string, string>} */
const soundWords = { on: "Sound on", off: "Sound off", blocked: "Sound blocked" };

/** What is always in view of the page itself. @param {any} body */
function items(body) {
  if (!byId("items").firstElementChild) buildItems();
  const out = body.masts_out || [];
  item("masts", out.length + (out.length === 1 ? " mast out" : " masts out") + (out.length > 0 && out.length < 3 ? ": " + out.join(", ") : ""), out.length > 0);
  const shelved = body.shelved || 0;
  item("shelf", shelved + " shelved", shelved > 0);
  const state = sound.state();
  item("sound", soundWords[state], state !== "on");
  setText(byId("sound-switch"), sound.on ? "Turn sound off" : "Turn sound on");
  const used = body.runway_in_use || "";
  if (runwayField instanceof HTMLSelectElement) {
    if (document.activeElement !== runwayField && runwayField.value !== used) runwayField.value = used;
  } else if (runwayField) setText(runwayField, "Runway in use: " + (used || "not set"));
  const status = body.status || {};
  const remarks = refused ? [refused] : [];
  remarks.push(...(status.remarks || []));
  if (status.history && status.history.degraded) remarks.push("The history may miss what is told now: " + status.history.reason);
  setText(byId("remarks"), remarks.join(" "));
  byId("remarks-panel").hidden = remarks.length === 0;
}

let refused = ""; // why the last choice of a runway was not taken

/** @param {string} name @param {string} text @param {boolean} notable */
function item(name, text, notable) {
  const node = byId("item-" + name);
  setText(node, text);
  node.classList.toggle("notable", notable);
}

function buildItems() {
  byId("items").append(el("li", { id: "item-masts" }), el("li", { id: "item-shelf" }),
    el("li", null, el("button", { type: "button", id: "item-sound", title: "Plays both sounds, and so lets the browser make sound", onclick: () => void sound.test() })));
  const controls = byId("controls");
  if (may("tower")) {
    const field = choice([["", "not set"]]);
    field.addEventListener("change", async () => {
      refused = "";
      try {
        await send("/api/v1/runway-in-use", { runway: field.value });
      } catch (e) {
        refused = "The runway in use was not set: " + (e instanceof Error ? e.message : String(e));
      }
    });
    runwayField = field;
    const label = labelled("Runway in use", field);
    label.className = "inline";
    controls.append(label);
  } else controls.append(runwayField = el("span"));
  controls.append(el("button", { type: "button", class: "spare", onclick: () => void sound.test() }, "Test sounds"),
    el("button", { type: "button", id: "sound-switch", onclick: () => void sound.set(!sound.on) }));
  sound.probe();
}

/** @param {any} body */
function ends(body) {
  const table = byId("ends");
  if (!table.firstElementChild) {
    table.append(el("thead", null, el("tr", null, ...["Runway", "From", "Mean", "Gust", "Along", "Across"].map((w) => el("th", { scope: "col" }, w)))), el("tbody"));
  }
  const used = body.runway_in_use;
  const list = (body.ends || []).slice().sort((/** @type {any} */ a, /** @type {any} */ b) => Number(b.runway === used) - Number(a.runway === used));
  keyed(/** @type {Element} */ (table.querySelector("tbody")), list, (e) => e.runway, () => el("tr"), (row, e) => {
    row.className = e.runway === used ? "used" : "";
    const cells = endCells(e);
    const text = cells.join("|");
    if (row.dataset.text === text) return;
    row.dataset.text = text;
    row.replaceChildren(el("th", { scope: "row" }, e.runway), ...(e.observed && typeof e.speed_kt === "number"
      ? cells.map((c) => el("td", null, c[0], c[1] ? el("small", null, c[1]) : null))
      : [el("td", { colspan: 5, class: "gap" }, el("span", null, "Not observed"), el("small", null, reasonOf(e.sentence)))]));
  });
}

/** Why there is no wind, without what the page says already. @param {string} sentence */
function reasonOf(sentence) {
  return (sentence || "").replace(/^EXERCISE: /, "").replace(/^Wind at runway \w+: not observed, /, "");
}

/** From, mean, gust, along and across, each with a smaller addition. @param {any} e @returns {[string, string][]} */
function endCells(e) {
  if (!e.observed || typeof e.speed_kt !== "number") return [[e.sentence || "", ""]];
  const spread = e.from_spread_deg;
  return [
    [e.from_magnetic_deg === null ? "variable" : bearing(e.from_magnetic_deg) + "°", spread === null || spread === undefined ? "" : "spread " + Math.round(spread) + "°"],
    [knots(e.speed_kt), "kt"],
    e.gust_kt === null || e.gust_kt === undefined ? ["", "none"] : [knots(e.gust_kt), ""],
    [headwind(e.headwind_kt), ""],
    [knots(Math.abs(e.crosswind_kt)), "from the " + e.crosswind_from],
  ];
}

/** The layout comes once, and again when it has become another one. @param {any} body */
async function askLayout(body) {
  const wanted = body.layout_id || "the only one";
  if (layoutAsked === wanted) return;
  layoutAsked = wanted;
  try {
    const answer = await read("/api/v1/layout");
    layout = answer.layout || answer;
    plan.setLayout(layout);
    fillRunways();
  } catch {
    layoutAsked = ""; // asked for again at the next step
  }
}

function fillRunways() {
  /** @type {string[]} */
  const runways = layout.runways.flatMap((/** @type {any} */ r) => r.ends.map((/** @type {any} */ e) => e.designator));
  if (runwayField instanceof HTMLSelectElement) {
    runwayField.replaceChildren(...[["", "not set"], ...runways.map((r) => [r, r])].map(([value, words]) => el("option", { value }, words)));
    runwayField.value = last ? last.runway_in_use || "" : "";
  }
  pilotReport(byId("report"), runways, { at: () => new Date(serverNow()), after: () => {} });
  const up = choice([["north", "North up"], ...runways.map((r) => /** @type {[string, string]} */ ([r, "Runway " + r + " up"]))]);
  up.addEventListener("change", () => plan.choose(up.value === "north" ? { up: "north" } : { up: "runway", runway: up.value }));
  const operation = choice([["landing", "Landing"], ["take-off", "Take-off"]]);
  operation.addEventListener("change", () => plan.choose({ operation: operation.value }));
  up.setAttribute("aria-label", "What is up on the plan");
  operation.setAttribute("aria-label", "Paths on the plan");
  byId("plan-choices").replaceChildren(operation, up);
}

/** What the plan shows, in sentences, and how to read its bars. @param {any} body */
function told(body) {
  const host = byId("plan-told");
  if (!host.firstElementChild) host.append(el("p", { class: "quiet legend" }), el("div"));
  const legend = /** @type {Element} */ (host.firstElementChild);
  if (!legend.firstElementChild) {
    const swatch = (/** @type {number} */ kt) => {
      const node = el("span", { class: "legend-bar", "aria-hidden": "true" });
      node.style.background = changeColour(kt);
      return node;
    };
    legend.append("Bars: the headwind, on the left of who flies; a tailwind on the right. Since the path began it has ",
      swatch(-20), " fallen, ", swatch(0), " stayed, ", swatch(20), " risen. Hatched: not observed.");
  }
  const sentences = [...(body.outflows || []), ...(body.fronts || []), ...(body.vertical || [])].map((x) => x.text).filter(Boolean);
  keyed(/** @type {Element} */ (host.lastElementChild), sentences.map((text, i) => ({ text, key: String(i) })), (s) => s.key, () => el("p"), (n, s) => setText(n, s.text));
}

/** @param {any} body */
function profiles(body) {
  if (!layout) return;
  const host = byId("profiles");
  const columns = getComputedStyle(host).gridTemplateColumns.split(" ").length;
  const width = Math.floor(host.clientWidth / columns) - 12;
  if (width < 80) return;
  host.replaceChildren(...(body.paths || []).map((/** @type {any} */ p) => drawProfile(p,
    layout.paths.find((/** @type {any} */ l) => l.runway === p.runway && l.operation === p.operation),
    (body.profiles || []).find((/** @type {any} */ x) => x.runway === p.runway && x.operation === p.operation),
    body.alerts || [], width)));
}

/** @param {any} body */
function paths(body) {
  keyed(byId("paths"), body.paths || [], (p) => p.runway + p.operation,
    (p) => el("div", { class: "row" }, el("span", { class: "swatch", "aria-hidden": "true" }), el("h3", null, pathName(p.runway, p.operation)), el("p", { class: "state" }), el("p", { class: "told" })),
    (node, p) => {
      const side = p.state === "raised" ? "raised" : p.state === "below-limits" ? "below" : "unknown";
      if (node.className !== "row " + side) node.className = "row " + side;
      setText(node.children[2], stateWords(p.state));
      setText(node.children[3], pathTold(p));
    });
}

/** @param {any} p */
function pathTold(p) {
  if (p.text) return p.text;
  if (p.state === "not-observed" || !p.headwind_change) return p.reason || "";
  const { loss, gain } = p.headwind_change;
  const one = (/** @type {any} */ c, /** @type {string} */ word) => (c && typeof c.change_kt === "number" ? word + " by " + knots(Math.abs(c.change_kt)) + " kt at most" : "");
  return [one(loss, "falls"), one(gain, "rises")].filter(Boolean).join(", ") + ".";
}

/** Steps of the last quarter of an hour: seconds, then one column for each end. @type {(number | null)[][]} */
let memory = [[]];
/** @type {string[]} */
let memoryEnds = [];
/** @type {Series | null} */
let series = null;
const quarter = 900; // s

/** @param {any} body */
function remember(body) {
  const names = (body.ends || []).map((/** @type {any} */ e) => e.runway);
  if (names.join() !== memoryEnds.join()) {
    memoryEnds = names;
    memory = [[], ...names.map(() => /** @type {(number | null)[]} */ ([]))];
    byId("series").replaceChildren();
    series = new Series(byId("series"), names.map((/** @type {string} */ n, /** @type {number} */ i) => ({
      label: "Runway " + n, token: i % 2 ? "--rise" : "--ink", dash: [[], [8, 4], [2, 4], [12, 4, 2, 4]][i % 4],
    })), { height: 150, value: (v) => (v < 0 ? "tail " : "") + Math.abs(Math.round(v)) });
  }
  const at = Math.round(Date.parse(body.at) / 1000);
  const times = /** @type {number[]} */ (memory[0]);
  if (times.length && at <= times[times.length - 1]) return;
  times.push(at);
  (body.ends || []).forEach((/** @type {any} */ e, /** @type {number} */ i) => memory[i + 1].push(e.observed && typeof e.headwind_kt === "number" ? e.headwind_kt : null));
  while (times[0] < at - quarter || times.length > quarter) memory.forEach((column) => column.shift());
  // Drawing a line anew every second would show nothing that every fifth does not.
  if (series && (times.length < 4 || at % 5 === 0)) series.set(memory);
}

/** Openings, changes of level and closings, the newest first. @type {{id: string, when: string, text: string}[]} */
let lately = [];
/** @type {Map<string, string>} */
const levelOf = new Map();

/** @param {any} a an issue */
function issue(a) {
  const known = levelOf.get(a.id);
  const worth = a.state === "closed" || known === undefined || known !== a.level;
  if (a.state === "closed") levelOf.delete(a.id);
  else levelOf.set(a.id, a.level);
  if (!worth) return;
  const what = a.state === "closed" ? "Closed, since " + closingWords(a.closed_because) + ": " : known === undefined ? "" : "Now level " + levelNumber(a.level) + ": ";
  lately.unshift({ id: a.id + "/" + a.revision, when: a.state === "closed" ? a.closed || a.updated : a.updated, text: what + a.text });
  lately = lately.slice(0, 20);
  showLately();
}

function showLately() {
  const items = lately.length ? lately : [{ id: "none", when: "", text: "Nothing has been told since this page was opened." }];
  keyed(byId("lately"), items, (l) => l.id, (l) => el("li", null, l.when ? el("time", null, timeOf(l.when) + " UTC ") : null, l.text), () => {});
}

/** What was told before this page was opened. */
async function past() {
  try {
    const answer = await read("/api/v1/events?limit=10");
    const exercise = document.body.dataset.exercise === "true";
    const had = new Set(lately.map((l) => l.id.split("/")[0]));
    for (const a of answer.events) {
      if (a.exercise !== exercise || had.has(a.id)) continue;
      lately.push({ id: a.id + "/" + a.revision, when: a.closed || a.updated, text: (a.state === "closed" ? "Closed: " : "") + kindWords(a.kind)[0] + ", " + pathName(a.runway, a.operation) + ", level " + levelNumber(a.level) + ". " + a.text });
    }
  } catch {
    return; // the list then begins with this page, and says so
  }
  showLately();
}

/** @param {string} why */
function blank(why) {
  const open = last && (last.alerts || []).length > 0;
  last = null;
  const words = document.getElementById("words");
  if (words) {
    words.remove();
    byId("glass").hidden = false;
  }
  setText(byId("gone-why"), why + (open ? " An alert was open at the last step that arrived." : ""));
  byId("gone").hidden = false;
  // What is hidden must not be read out or copied either.
  for (const id of ["condition", "meaning", "age", "clock"]) setText(byId(id), "No information");
  for (const id of ["alerts", "ends", "profiles", "paths", "plan-told", "rail"]) byId(id).replaceChildren();
  delete byId("rail").dataset.condition;
  if (byId("items").firstElementChild) {
    item("masts", "Masts: no information", true);
    item("shelf", "Shelved: no information", true);
  }
  plan.blank();
  sound.want("none");
  sound.play("first"); // that nothing is known is worth hearing once
}

live({
  step, alert: issue, blank,
  resync() {
    levelOf.clear();
    layoutAsked = "";
    void past();
  },
});
window.setInterval(clock, 200);
showLately();
void past();
