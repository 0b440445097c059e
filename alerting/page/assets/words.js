// Takes objects of the API and gives words for them. Knots, degrees magnetic
// and UTC; a fall or a rise is said in words and never by a sign.

/** @type {Record<string, [string, string, string]>} word, shape, meaning */
const conditions = {
  "observing": ["Observing", "full", "Every path is observed where it has to be."],
  "partly-observing": ["Partly observing", "half", "Some paths are not observed, or not where it matters."],
  "blind": ["Blind", "empty", "No path is observed."],
  "no-contact": ["No contact", "none", "Nothing is heard. Read every path as not observed."],
};

/** The conditions in the order of their places. */
export const conditionOrder = ["observing", "partly-observing", "blind", "no-contact"];

/** @param {string} condition @returns {[string, string, string]} */
export function conditionWords(condition) {
  return conditions[condition] || conditions["no-contact"];
}

/** @type {Record<string, number>} */
const levels = { "noticeable": 1, "large": 2, "beyond-margin": 3 };

/** @param {string} level @returns {number} 1 to 3, 0 where it is unknown */
export function levelNumber(level) {
  return levels[level] || 0;
}

/** @param {string} level */
export function levelWords(level) {
  return "Level " + levelNumber(level) + " of 3, " + level.replaceAll("-", " ");
}

/** @type {Record<string, [string, string]>} words, class */
const kinds = {
  "headwind-loss": ["Headwind falls", "fall"],
  "headwind-gain": ["Headwind rises", "rise"],
};

/** @param {string} kind @returns {[string, string]} */
export function kindWords(kind) {
  if (kinds[kind]) return kinds[kind];
  const words = (kind || "alert").replaceAll("-", " ");
  return [words.charAt(0).toUpperCase() + words.slice(1), "other"];
}

/** @type {Record<string, string>} */
const states = {
  "raised": "Alert open", "below-limits": "Below limits", "not-observed": "Not observed",
  "never-seen": "not heard of yet", "under-maintenance": "under maintenance",
};

/** @param {string} state */
export function stateWords(state) {
  return states[state] || (state || "no information").replaceAll("-", " ");
}

/** @type {Record<string, string>} */
const closings = {
  "below-level": "the change fell below the level", "not-observed": "its ground was no longer observed",
  "path-withdrawn": "the path was withdrawn", "expired-while-down": "the program was not running",
};

/** @param {string | null} why */
export function closingWords(why) {
  return why ? closings[why] || why.replaceAll("-", " ") : "";
}

/** @param {string} runway @param {string} operation */
export function pathName(runway, operation) {
  return (operation === "take-off" ? "Take-off " : "Landing ") + runway;
}

/** @param {number} n @param {number} [digits] */
export function two(n, digits = 2) {
  return String(n).padStart(digits, "0");
}

/** @param {string | number | Date} when @returns {string} 14:15:41 */
export function timeOf(when) {
  const t = new Date(when);
  if (isNaN(t.getTime())) return "no time";
  return two(t.getUTCHours()) + ":" + two(t.getUTCMinutes()) + ":" + two(t.getUTCSeconds());
}

/** @param {string | number | Date} when @returns {string} 2026-07-01 14:15:41 */
export function dayAndTime(when) {
  const t = new Date(when);
  if (isNaN(t.getTime())) return "no time";
  return two(t.getUTCFullYear(), 4) + "-" + two(t.getUTCMonth() + 1) + "-" + two(t.getUTCDate()) + " " + timeOf(t);
}

/** @param {number} seconds */
export function lasting(seconds) {
  if (!isFinite(seconds)) return "no time";
  const s = Math.max(0, Math.round(seconds));
  if (s < 60) return s + " s";
  if (s < 3600) return Math.floor(s / 60) + " min " + (s % 60) + " s";
  return Math.floor(s / 3600) + " h " + Math.floor((s % 3600) / 60) + " min";
}

/** @param {number | null | undefined} kt */
export function knots(kt) {
  return kt === null || kt === undefined ? "none" : String(Math.round(kt));
}

/**
 * A probability. At either end no more is said than a model of the air can
 * know: see Odds of wording, which says the same.
 * @param {number | null | undefined} p @returns {string} "80 in 100"
 */
export function odds(p) {
  const of = Math.round((p === null || p === undefined ? NaN : p) * 100);
  if (Number.isNaN(of)) return "an unknown number in 100";
  if (of > 95) return "over 95 in 100";
  return (of < 5 ? "under 5" : String(of)) + " in 100";
}

/** @param {number} deg @returns {string} 001 to 360 */
export function bearing(deg) {
  const d = ((Math.round(deg) % 360) + 360) % 360;
  return two(d === 0 ? 360 : d, 3);
}

/** @param {number} kt */
export function headwind(kt) {
  return Math.round(kt) === 0 ? "head 0" : (kt > 0 ? "head " : "tail ") + Math.abs(Math.round(kt));
}

/**
 * Splits a sentence at its first amount in knots, which is shown large.
 * @param {string} sentence
 * @returns {[string, string, string]} before, amount, after
 */
export function amountOf(sentence) {
  const found = /\d+(?:\.\d+)? kt/.exec(sentence);
  if (!found) return [sentence, "", ""];
  return [sentence.slice(0, found.index), found[0], sentence.slice(found.index + found[0].length)];
}
