// Takes a path and its profile and draws the headwind against distance, with
// the band that it lies in and the greatest change marked. Next is the module
// of a view.

import { el, svg } from "./dom.js";
import { unobserved } from "./ground.js";
import { kindWords, knots, levelNumber, pathName, stateWords } from "./words.js";

/**
 * The change to mark: that of the worst open alert, or the greatest one.
 * @param {any} path @param {any[]} alerts
 * @returns {{from: number, to: number, kt: number, level: number} | null}
 */
export function markedChange(path, alerts) {
  const open = alerts.filter((a) => a.runway === path.runway && a.operation === path.operation &&
    typeof a.from_m === "number" && typeof a.change_kt === "number" && kindWords(a.kind)[1] !== "other");
  open.sort((a, b) => levelNumber(b.level) - levelNumber(a.level) || Math.abs(b.change_kt) - Math.abs(a.change_kt));
  if (open.length) return { from: open[0].from_m, to: open[0].to_m, kt: open[0].change_kt, level: levelNumber(open[0].level) };
  const both = path.headwind_change ? [path.headwind_change.loss, path.headwind_change.gain] : [];
  const known = both.filter((c) => c && typeof c.change_kt === "number" && typeof c.from_m === "number");
  known.sort((a, b) => Math.abs(b.change_kt) - Math.abs(a.change_kt));
  return known.length ? { from: known[0].from_m, to: known[0].to_m, kt: known[0].change_kt, level: 0 } : null;
}

/**
 * @param {any} path the path object
 * @param {any} ground its layout, or null
 * @param {any} profile its points, or null
 * @param {any[]} alerts open ones
 * @param {number} width in pixels
 * @returns {HTMLElement}
 */
export function drawProfile(path, ground, profile, alerts, width) {
  const change = markedChange(path, alerts);
  const state = stateWords(path.state);
  const figure = el("div", { class: "profile" },
    el("h3", null, pathName(path.runway, path.operation) + " ", el("span", null, state)));
  if (!ground || !profile || profile.points.length === 0) {
    figure.append(el("p", { class: "not-here" }, "No profile is worked out."));
    return figure;
  }
  figure.append(chart(path, ground, profile, change, width));
  return figure;
}

/**
 * @param {any} path @param {any} ground @param {any} profile
 * @param {ReturnType<typeof markedChange>} change @param {number} width
 */
function chart(path, ground, profile, change, width) {
  const height = Math.max(120, Math.min(190, width * 0.42));
  // As wide as "tail 20" in the letters of the style sheet.
  const letter = Math.max(14, parseFloat(getComputedStyle(document.body).fontSize) * 0.85);
  const [left, right, top, bottom] = [letter * 4.4, 8, 10, letter * 1.7];
  const from = ground.length_from_m, to = ground.length_to_m;
  const points = profile.points.filter((/** @type {any} */ p) => p.observed && p.headwind_kt !== null);
  points.sort((/** @type {any} */ a, /** @type {any} */ b) => b.at_m - a.at_m);
  // At least 20 kt are shown, so that a light breeze does not look like a storm.
  let low = Math.min(0, ...points.map((/** @type {any} */ p) => p.low_kt));
  let high = Math.max(0, ...points.map((/** @type {any} */ p) => p.high_kt));
  low = Math.floor(low / 10) * 10;
  high = Math.max(Math.ceil(high / 10) * 10, low + 20);
  const x = (/** @type {number} */ m) => left + ((from - m) / (from - to)) * (width - left - right);
  const y = (/** @type {number} */ kt) => top + ((high - kt) / (high - low)) * (height - top - bottom);
  const root = svg("svg", { viewBox: `0 0 ${width} ${height}`, role: "img", "aria-label": label(path, change) });
  const step = high - low > 40 ? 20 : 10;
  for (let kt = Math.ceil(low / step) * step; kt <= high; kt += step) {
    root.append(svg("path", { class: kt === 0 ? "zero" : "tick", d: `M${left} ${y(kt)}H${width - right}`, "stroke-dasharray": kt === 0 ? null : "1 5" }),
      svg("text", { class: "quiet", x: left - 6, y: y(kt) + 5, "text-anchor": "end" }, kt < 0 ? "tail " + -kt : String(kt)));
  }
  for (let m = Math.floor(from / 1000) * 1000; m >= to; m -= 1000) {
    root.append(svg("path", { class: "tick", d: `M${x(m)} ${height - bottom}v5` }));
    if (m % 2000 === 0) root.append(svg("text", { class: "quiet", x: x(m), y: height - 6, "text-anchor": "middle" }, place(path.operation, m)));
  }
  root.append(svg("path", { class: "threshold", d: `M${x(0)} ${top}V${height - bottom}` }));
  for (const [a, b] of unobserved(path.observed || [], from, to)) {
    root.append(svg("rect", { x: x(a), y: top, width: Math.max(0, x(b) - x(a)), height: height - top - bottom, fill: "url(#hatch)" }));
  }
  for (const run of runs(points)) {
    const upper = run.map((p) => x(p.at_m).toFixed(1) + " " + y(p.high_kt).toFixed(1));
    const lower = run.map((p) => x(p.at_m).toFixed(1) + " " + y(p.low_kt).toFixed(1)).reverse();
    root.append(svg("path", { class: "range", d: "M" + upper.concat(lower).join("L") + "Z" }),
      svg("path", { class: "middle", d: "M" + run.map((p) => x(p.at_m).toFixed(1) + " " + y(p.headwind_kt).toFixed(1)).join("L") }));
  }
  if (change) mark(root, points, change, x, y, { left, right: width - right, top, bottom: height - bottom });
  return root;
}

/** A place on the axis, in km: before the threshold, or from the start of the roll. @param {string} operation @param {number} m */
function place(operation, m) {
  if (m === 0) return operation === "landing" ? "threshold" : "start";
  return operation === "landing" ? m / 1000 + (m < 0 ? " beyond" : "") : String(-m / 1000);
}

/** Stretches of points between which nothing is missing. @param {any[]} points @returns {any[][]} */
function runs(points) {
  /** @type {any[][]} */
  const out = [];
  const gaps = points.slice(1).map((p, i) => points[i].at_m - p.at_m).sort((a, b) => a - b);
  const usual = gaps.length ? gaps[Math.floor(gaps.length / 2)] : 0;
  for (const p of points) {
    const run = out[out.length - 1];
    if (run && run[run.length - 1].at_m - p.at_m <= usual * 1.6) run.push(p);
    else out.push([p]);
  }
  return out;
}

/**
 * @param {SVGSVGElement} root @param {any[]} points @param {NonNullable<ReturnType<typeof markedChange>>} change
 * @param {(m: number) => number} x @param {(kt: number) => number} y
 * @param {{left: number, right: number, top: number, bottom: number}} box
 */
function mark(root, points, change, x, y, box) {
  const at = (/** @type {number} */ m) => points.reduce((best, p) => (Math.abs(p.at_m - m) < Math.abs(best.at_m - m) ? p : best), points[0]);
  const [a, b] = [at(change.from), at(change.to)];
  if (!a || !b) return;
  const falls = change.kt < 0;
  const [x1, y1, x2, y2] = [x(a.at_m), y(a.headwind_kt), x(b.at_m), y(b.headwind_kt)];
  root.append(svg("path", { class: "change " + (falls ? "falls" : "rises"), d: `M${x1} ${y1}L${x2} ${y2}M${x1} ${y1 - 6}v12M${x2} ${y2 - 6}v12` }));
  const words = (falls ? "falls " : "rises ") + knots(Math.abs(change.kt)) + " kt";
  const mid = Math.min(box.right - 50, Math.max(box.left + 50, (x1 + x2) / 2));
  const high = Math.min(y1, y2) - 9;
  root.append(svg("text", { x: mid, y: high < box.top + 10 ? Math.min(box.bottom - 4, Math.max(y1, y2) + 20) : high, "text-anchor": "middle" }, words));
}

/** @param {any} path @param {ReturnType<typeof markedChange>} change */
function label(path, change) {
  const name = pathName(path.runway, path.operation) + ": headwind against distance to the threshold";
  if (!change) return name + ".";
  return name + ". The greatest change: it " + (change.kt < 0 ? "falls" : "rises") + " by about " + knots(Math.abs(change.kt)) +
    " kt between " + (change.from / 1000).toFixed(1) + " and " + (change.to / 1000).toFixed(1) + " km before the threshold.";
}
