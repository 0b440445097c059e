// Takes a wind or the state of a mast and gives its sign: the wind barb as
// weather charts have it (WMO-No. 485, appendix on graphical signs, from
// memory), and a shape for each state, so that none is told by colour alone.

import { svg } from "./dom.js";

/**
 * A wind barb: the shaft points to where the wind comes from; a half feather is
 * 5 kt, a full one 10, a pennant 50. They stand clockwise of the shaft, in the
 * southern hemisphere counterclockwise.
 * @param {number} x the mast, pixels
 * @param {number} y
 * @param {[number, number]} from unit vector on the drawing to where the wind comes from
 * @param {number} kt
 * @param {boolean} south
 * @returns {SVGGElement}
 */
export function barb(x, y, from, kt, south) {
  const group = svg("g", { class: "barb-sign" });
  let left = Math.round(kt / 5) * 5;
  if (left < 5) { // less than 3 kt: a ring around the mast
    group.append(svg("circle", { class: "barb", cx: x, cy: y, r: 11 }));
    return group;
  }
  const [ux, uy] = from;
  const turn = south ? -1 : 1;
  const [sx, sy] = [-uy * turn, ux * turn]; // clockwise, since y runs down
  const length = 42, step = 7, feather = 15;
  const point = (/** @type {number} */ along, /** @type {number} */ aside) =>
    (x + ux * along + sx * aside).toFixed(1) + " " + (y + uy * along + sy * aside).toFixed(1);
  let shape = "M" + point(7, 0) + "L" + point(length, 0);
  let at = length;
  for (; left >= 50; left -= 50) {
    group.append(svg("path", { class: "pennant", d: "M" + point(at, 0) + "L" + point(at - step / 2, feather) + "L" + point(at - step, 0) + "Z" }));
    at -= step + 2;
  }
  if (left === 5 && at === length) at -= step; // a lone half feather stands away from the end
  for (; left >= 10; left -= 10, at -= step) shape += "M" + point(at, 0) + "L" + point(at + 5, feather);
  if (left === 5) shape += "M" + point(at, 0) + "L" + point(at + 2.5, feather / 2);
  group.prepend(svg("path", { class: "barb", d: shape }));
  return group;
}

/**
 * The shape of a mast by its state: a disc while it serves, with a slit when it
 * is late; a ring while it starts; a square under maintenance; a crossed ring
 * for whatever else.
 * @param {number} x @param {number} y @param {string} state
 */
export function mastSign(x, y, state) {
  const group = svg("g");
  const r = 7;
  if (state === "live") group.append(svg("circle", { class: "mast live", cx: x, cy: y, r }));
  else if (state === "late") {
    group.append(svg("circle", { class: "mast live", cx: x, cy: y, r }), svg("path", { class: "slit", d: `M${x - 7} ${y}h14` }));
  } else if (state === "starting") group.append(svg("circle", { class: "mast", cx: x, cy: y, r }));
  else if (state === "under-maintenance") {
    group.append(svg("path", { class: "mast", d: `M${x - 7} ${y - 7}h14v14h-14zM${x - 7} ${y + 7}l14-14` }));
  } else {
    group.append(svg("circle", { class: "mast", cx: x, cy: y, r: 8 }), svg("path", { class: "mast", d: `M${x - 5.5} ${y - 5.5}l11 11m-11 0 11-11` }));
  }
  return group;
}
