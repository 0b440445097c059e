// Takes the stream and gives the steps to whoever shows them; and watches,
// without anybody's help, that they keep coming. Every view has exactly one.
// Next are the modules of the views.

import { Stream } from "./stream.js";
import { byId, el, setText } from "./dom.js";
import { conditionWords, levelNumber, timeOf } from "./words.js";

/**
 * Without a new step for so long everything is no information, in ms: five
 * seconds, less the time that it takes to notice and to paint.
 */
export const limit = 4600;

/**
 * Decides from steps and the running of a clock whether what is shown may still
 * be shown. A step counts only if it is another one than the last: a server
 * that repeats itself is not alive.
 */
export class Watch {
  /** @param {(why: string) => void} blank @param {() => void} back */
  constructor(blank, back) {
    this.blank = blank;
    this.back = back;
    this.mark = "";
    this.at = -Infinity;
    this.gone = false;
  }

  /** @param {string} mark names the step @param {number} now in ms @returns {boolean} it is a new one */
  step(mark, now) {
    if (mark === this.mark) return false;
    this.mark = mark;
    this.at = now;
    if (this.gone) {
      this.gone = false;
      this.back();
    }
    return true;
  }

  /** @param {number} now in ms @param {string} why */
  check(now, why) {
    if (this.gone || now - this.at < limit) return;
    this.gone = true;
    this.blank(why);
  }
}

/**
 * @typedef {object} Shows
 * @property {(body: any) => void} [step]
 * @property {(issue: any) => void} [alert]
 * @property {(body: any) => void} [resync]
 * @property {(why: string) => void} [blank] every value is to go
 * @property {() => void} [back] values come again
 */

/** @param {Shows} shows */
export function live(shows) {
  const exercise = document.body.dataset.exercise === "true";
  let why = "The stream has not begun.";
  const watch = new Watch(
    (reason) => {
      document.body.classList.add("blank");
      line("No information", reason);
      document.title = "No information: " + document.body.dataset.airfield;
      if (shows.blank) shows.blank(reason);
    },
    () => {
      document.body.classList.remove("blank");
      if (shows.back) shows.back();
    });
  watch.at = performance.now();
  const stream = new Stream("/api/v1/stream", {
    step(body) {
      // An exercise never stands on a page made for live wind, nor the other
      // way round: the page is made anew before anything is shown.
      if (body.exercise !== exercise) {
        window.location.reload();
        return;
      }
      // The time of the step, not the number of the view, shows that steps are
      // still worked out: a view may be made anew for another reason.
      const fresh = watch.step(String(body.at), performance.now());
      if (!fresh && watch.gone) return;
      top(body);
      if (shows.step) shows.step(body);
    },
    alert(issue) { if (shows.alert) shows.alert(issue); },
    resync(body) {
      void renew();
      if (shows.resync) shows.resync(body);
    },
    link(open, reason) { why = open ? "The program sends nothing new." : reason; },
  });
  const look = () => watch.check(performance.now(), why);
  window.setInterval(look, 200);
  // Timers rest in a page that nobody sees; it is looked at as soon as it is seen.
  document.addEventListener("visibilitychange", look);
  stream.start();
  return stream;
}

/**
 * Another run of the program may be another version of it: a page whose own
 * files are no longer served is made anew.
 */
async function renew() {
  try {
    const answer = await fetch("/assets/" + document.documentElement.dataset.build + "/icon.svg", { cache: "no-store" });
    if (answer.status === 404) window.location.reload();
  } catch {
    return; // it is away again, and a step will come or not
  }
}

/** @param {string} strong @param {string} more */
function line(strong, more) {
  const node = byId("live-line");
  node.hidden = strong === "";
  if (!node.firstElementChild) node.append(el("strong"), " ", el("span"));
  setText(/** @type {Element} */ (node.firstElementChild), strong + (more ? ":" : ""));
  setText(/** @type {Element} */ (node.lastElementChild), more);
}

/** What every view says of the moment. @param {any} body */
function top(body) {
  const [word] = conditionWords(body.condition);
  const open = Math.max((body.occurrences || []).filter((/** @type {any} */ o) => !o.ended).length, (body.alerts || []).length ? 1 : 0);
  const worst = Math.max(0, ...(body.alerts || []).map((/** @type {any} */ a) => levelNumber(a.level)));
  const exercise = document.body.dataset.exercise === "true" ? "EXERCISE: " : "";
  const title = open ? "Level " + worst + " of 3" : word;
  if (document.body.dataset.view === "now") line("", "");
  else line(word, open ? open + (open === 1 ? " alert open, level " : " alerts open, at most level ") + worst + " of 3. " + timeOf(body.at) + " UTC"
    : "no alert open, which does not mean no windshear. " + timeOf(body.at) + " UTC");
  const full = exercise + document.body.dataset.airfield + ": " + title;
  if (document.title !== full) document.title = full;
}
