// Takes texts with the places they belong to, the most important first, and
// gives each the nearest place where it covers no other. Next is plan.js.

import { svg } from "./dom.js";

/** @typedef {{x0: number, y0: number, x1: number, y1: number}} Box */

export class Labels {
  /** @param {number} width of the drawing @param {number} height @param {number} size of the letters, pixels */
  constructor(width, height, size) {
    this.width = width;
    this.height = height;
    this.size = size;
    /** @type {Box[]} */
    this.taken = [];
    this.group = svg("g");
  }

  /** Keeps texts away from a sign. @param {number} x @param {number} y @param {number} r */
  keep(x, y, r) {
    this.taken.push({ x0: x - r, y0: y - r, x1: x + r, y1: y + r });
  }

  /**
   * @param {number} x @param {number} y the place it belongs to
   * @param {string} text
   * @param {{quiet?: boolean, bold?: boolean, off?: number}} [how] off: distance from the place, pixels
   */
  add(x, y, text, how = {}) {
    const wide = text.length * this.size * (how.bold ? 0.66 : 0.6), high = this.size * 1.15;
    const off = how.off || 10;
    /** @type {Box | null} */
    let best = null;
    let least = Infinity;
    for (let ring = 0; ring < 5 && least > 0; ring++) {
      const d = off + ring * high * 0.8;
      for (const [cx, cy] of [[d, d / 2], [d, -d / 2 - high], [-d - wide, d / 2], [-d - wide, -d / 2 - high], [-wide / 2, d], [-wide / 2, -d - high]]) {
        const x0 = Math.min(this.width - wide - 2, Math.max(2, x + cx)), y0 = Math.min(this.height - high - 2, Math.max(2, y + cy));
        const box = { x0, y0, x1: x0 + wide, y1: y0 + high };
        const covers = this.taken.reduce((sum, t) => sum + overlap(box, t), 0);
        if (covers < least) [best, least] = [box, covers];
        if (least === 0) break;
      }
    }
    if (!best) return;
    this.taken.push(best);
    this.group.append(svg("text", { class: how.quiet ? "quiet" : null, x: best.x0.toFixed(1), y: (best.y1 - high * 0.24).toFixed(1), "font-weight": how.bold ? 700 : null }, text));
  }
}

/** @param {Box} a @param {Box} b @returns {number} square pixels */
function overlap(a, b) {
  return Math.max(0, Math.min(a.x1, b.x1) - Math.max(a.x0, b.x0)) * Math.max(0, Math.min(a.y1, b.y1) - Math.max(a.y0, b.y0));
}
