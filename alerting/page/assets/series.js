// Takes columns of numbers over time and draws them with uPlot, in the colours
// of the light that is set. Lines differ by their dashes as well as by colour.
// Next is the module of a view.

import { two } from "./words.js";

/**
 * @typedef {object} Line
 * @property {string} label
 * @property {string} token colour, as a custom property of the style sheet
 * @property {number[]} [dash]
 * @property {number} [width]
 */

/** @param {string} token */
function colour(token) {
  return getComputedStyle(document.documentElement).getPropertyValue(token).trim();
}

/** @param {number} s Unix seconds */
function clock(s) {
  const t = new Date(s * 1000);
  return two(t.getUTCHours()) + ":" + two(t.getUTCMinutes()) + ":" + two(t.getUTCSeconds());
}

export class Series {
  /**
   * @param {HTMLElement} host
   * @param {Line[]} lines
   * @param {{height?: number, value?: (v: number) => string, moved?: (s: number) => void}} [options]
   */
  constructor(host, lines, options) {
    this.host = host;
    this.lines = lines;
    this.options = options || {};
    /** @type {any} */
    this.plot = null;
    /** @type {(number | null)[][]} */
    this.data = [[]];
    new ResizeObserver(() => {
      if (this.plot && Math.abs(this.plot.width - this.host.clientWidth) > 4) this.plot.setSize({ width: this.host.clientWidth, height: this.height() });
    }).observe(host);
    window.addEventListener("sockline-screen", () => this.rebuild());
  }

  height() {
    return this.options.height || 180;
  }

  /** @param {(number | null)[][]} data Unix seconds, then one column for each line */
  set(data) {
    this.data = data;
    if (this.plot) this.plot.setData(data);
    else this.rebuild();
  }

  /** Marks a moment. @param {number} s Unix seconds */
  point(s) {
    if (!this.plot) return;
    this.plot.setCursor({ left: this.plot.valToPos(s, "x"), top: 0 }, false);
  }

  rebuild() {
    if (this.plot) this.plot.destroy();
    this.plot = null;
    const maker = /** @type {any} */ (globalThis).uPlot;
    if (!maker || this.host.clientWidth < 50 || this.data[0].length === 0) return;
    const value = this.options.value || ((/** @type {number} */ v) => v.toFixed(0));
    const font = "14px " + getComputedStyle(document.body).fontFamily;
    const axis = { stroke: colour("--quiet"), font, grid: { stroke: colour("--rule"), width: 0.5 }, ticks: { stroke: colour("--rule") } };
    this.plot = new maker({
      width: this.host.clientWidth, height: this.height(),
      tzDate: (/** @type {number} */ s) => maker.tzDate(new Date(s * 1000), "Etc/UTC"),
      cursor: { y: false, drag: { setScale: false, x: false, y: false } },
      scales: { y: { range: (/** @type {any} */ _u, /** @type {number} */ low, /** @type {number} */ high) => [Math.min(0, Math.floor((low ?? 0) / 5) * 5), Math.max(10, Math.ceil((high ?? 0) / 5) * 5)] } },
      series: [{ label: "UTC", value: (/** @type {any} */ _u, /** @type {number | null} */ s) => (s === null ? "" : clock(s)) },
        ...this.lines.map((l) => ({
          label: l.label, stroke: colour(l.token), width: l.width || 2, dash: l.dash, spanGaps: false, points: { show: false },
          value: (/** @type {any} */ _u, /** @type {number | null} */ v) => (v === null || v === undefined ? "none" : value(v)),
        }))],
      axes: [{ ...axis, values: (/** @type {any} */ _u, /** @type {number[]} */ s) => s.map(clock), space: 90 },
        { ...axis, size: 72, values: (/** @type {any} */ _u, /** @type {number[]} */ v) => v.map(value) }],
      hooks: this.options.moved ? { setCursor: [(/** @type {any} */ u) => {
        const i = u.cursor.idx;
        if (i !== null && i !== undefined && u.cursor.event && this.options.moved) this.options.moved(/** @type {number} */ (this.data[0][i]));
      }] } : {},
    }, this.data, this.host);
  }
}
