// Takes the layout of an airfield in metres and gives places on a drawing of it
// in pixels, to scale. Next are plan.js and what it draws with.

/** Metres a second of one knot. */
export const knot = 1852 / 3600;

/** @typedef {[number, number]} Place east and north in metres, or x and y in pixels */

/** @param {number} deg @returns {Place} east and north of a unit vector towards a true bearing */
export function towards(deg) {
  const a = (deg * Math.PI) / 180;
  return [Math.sin(a), Math.cos(a)];
}

/** The point of a path so many metres before its threshold. @param {any} path @param {number} before @returns {Place} */
export function along(path, before) {
  const [e, n] = towards(path.bearing_true_deg);
  return [path.east_m - e * before, path.north_m - n * before];
}

export class Scale {
  /**
   * @param {Place[]} places all that must be on the drawing, metres
   * @param {number} up true bearing that points up
   * @param {number} width in pixels
   * @param {number} most height in pixels
   * @param {number} margin in pixels
   */
  constructor(places, up, width, most, margin) {
    const a = (up * Math.PI) / 180;
    this.cos = Math.cos(a);
    this.sin = Math.sin(a);
    this.up = up;
    const turned = places.map((p) => this.turn(p));
    const xs = turned.map((p) => p[0]);
    const ys = turned.map((p) => p[1]);
    const [left, right] = [Math.min(...xs), Math.max(...xs)];
    const [top, bottom] = [Math.min(...ys), Math.max(...ys)];
    const wide = Math.max(right - left, 100);
    const high = Math.max(bottom - top, 100);
    this.perMetre = Math.min((width - 2 * margin) / wide, (most - 2 * margin) / high);
    this.width = width;
    this.height = Math.min(most, high * this.perMetre + 2 * margin);
    this.x0 = width / 2 - ((left + right) / 2) * this.perMetre;
    this.y0 = this.height / 2 - ((top + bottom) / 2) * this.perMetre;
  }

  /** @param {Place} p metres @returns {Place} metres, turned, y downwards */
  turn([e, n]) {
    return [e * this.cos - n * this.sin, -(e * this.sin + n * this.cos)];
  }

  /** @param {Place} p metres @returns {Place} pixels */
  at(p) {
    const [x, y] = this.turn(p);
    return [this.x0 + x * this.perMetre, this.y0 + y * this.perMetre];
  }

  /** The unit vector on the drawing of a true bearing. @param {number} deg @returns {Place} */
  direction(deg) {
    return this.turn(towards(deg));
  }
}

/** @param {Place[]} points pixels @param {boolean} [closed] */
export function outline(points, closed) {
  return points.map(([x, y], i) => (i ? "L" : "M") + x.toFixed(1) + " " + y.toFixed(1)).join("") + (closed ? "Z" : "");
}

/**
 * The stretches of a path that are not observed, between its ends.
 * @param {number[][]} observed pairs of metres before the threshold, far end first
 * @param {number} from the far end, metres before the threshold
 * @param {number} to the other end
 * @returns {[number, number][]}
 */
export function unobserved(observed, from, to) {
  const held = observed.map(([a, b]) => /** @type {[number, number]} */ ([Math.min(from, Math.max(a, b)), Math.max(to, Math.min(a, b))]))
    .filter(([a, b]) => a > b).sort((x, y) => y[0] - x[0]);
  /** @type {[number, number][]} */
  const out = [];
  let at = from;
  for (const [a, b] of held) {
    if (a < at) out.push([at, a]);
    at = Math.min(at, b);
  }
  if (at > to) out.push([at, to]);
  return out;
}
