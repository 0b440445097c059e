// Takes the layout once and each step, and draws the airfield to scale: ground
// that is observed and that is not, the headwind as short bars along the paths,
// masts with their wind, outflows and fronts. Next is the module of a view.

import { svg } from "./dom.js";
import { along, knot, outline, Scale, towards, unobserved } from "./ground.js";
import { Labels } from "./labels.js";
import { barb, mastSign } from "./signs.js";
import { levelNumber, kindWords, knots, odds, stateWords, timeOf } from "./words.js";

/** @typedef {import("./ground.js").Place} Place */

const pixelsPerKnot = 1.9; // of a bar
const fullScale = 20; // kt of change at which the colours end
const corridor = 8; // half the width of the ground of a path, pixels

/**
 * The colour of a change of headwind, from vermillion by grey to blue.
 * @param {number} kt
 */
export function changeColour(kt) {
  const part = Math.round(Math.min(1, Math.abs(kt) / fullScale) * 100);
  return "color-mix(in oklab, var(" + (kt < 0 ? "--fall" : "--rise") + ") " + part + "%, var(--middle))";
}

export class Plan {
  /** @param {HTMLElement} host */
  constructor(host) {
    this.host = host;
    /** @type {any} */
    this.layout = null;
    /** @type {any} */
    this.body = null;
    this.up = "north";
    this.operation = "landing";
    this.runway = ""; // that is up, and whose paths are drawn; empty: all
    this.width = 0;
    /** @type {Map<number, number>} how many alerts are drawn on a side, by its bearing */
    this.stacks = new Map();
    /** @type {[number, number, string][]} texts of what is drawn */
    this.told = [];
    this.labels = new Labels(0, 0, 15);
    new ResizeObserver(() => {
      if (Math.abs(host.clientWidth - this.width) > 4) this.fit();
    }).observe(host);
  }

  /** @param {any} layout */
  setLayout(layout) {
    this.layout = layout;
    this.fit();
  }

  /** @param {{up?: string, operation?: string, runway?: string}} choice */
  choose(choice) {
    Object.assign(this, choice);
    this.fit();
  }

  /**
   * The paths that are drawn: those of the chosen operation, and any with an
   * open alert, whatever was chosen.
   * @returns {any[]}
   */
  shown() {
    const raised = (/** @type {any} */ p) => ((this.body && this.body.alerts) || []).some((/** @type {any} */ a) => a.runway === p.runway && a.operation === p.operation);
    return this.layout.paths.filter((/** @type {any} */ p) => p.operation === this.operation || raised(p));
  }

  /** Draws what does not change, and makes the layers of what does. */
  fit() {
    this.width = this.host.clientWidth;
    if (!this.layout || this.width < 50) return;
    const paths = this.shown();
    /** @type {Place[]} */
    const places = this.layout.masts.map((/** @type {any} */ m) => [m.east_m, m.north_m]);
    for (const p of paths) places.push(along(p, p.length_from_m), along(p, p.length_to_m));
    for (const r of this.layout.runways) for (const e of r.ends) places.push([e.east_m, e.north_m]);
    if (places.length === 0) places.push([0, 0]);
    let up = 0;
    if (this.up === "runway") {
      const ends = this.layout.runways.flatMap((/** @type {any} */ r) => r.ends);
      const used = ends.find((/** @type {any} */ e) => e.designator === this.runway) || ends[0];
      up = used ? used.bearing_true_deg : 0;
    }
    const most = Math.max(260, window.innerHeight * (this.up === "runway" ? 0.75 : 0.42));
    this.scale = new Scale(places, up, this.width, most, 46);
    this.moving = svg("g");
    const root = svg("svg", { viewBox: `0 0 ${this.width} ${this.scale.height.toFixed(0)}`, role: "img", "aria-label": "Plan of the airfield, to scale. What it shows is said in the sentences beside it." },
      this.still(), this.moving);
    this.host.replaceChildren(root);
    if (this.body) this.draw(this.body);
  }

  still() {
    const scale = /** @type {Scale} */ (this.scale);
    const group = svg("g");
    for (const r of this.layout.runways) {
      const [a, b] = r.ends;
      const half = Math.max(r.width_m || 18, 5 / scale.perMetre) / 2;
      const [se, sn] = towards(a.bearing_true_deg + 90);
      /** @type {Place[]} */
      const corners = [[a, 1], [b, 1], [b, -1], [a, -1]].map(([e, s]) => scale.at([e.east_m + se * half * s, e.north_m + sn * half * s]));
      group.append(svg("path", { class: "runway", d: outline(corners, true) }));
    }
    // A bar for the distance, and an arrow for true north.
    const km = scale.perMetre * 1000 > 110 ? 1 : 2;
    const long = km * 1000 * scale.perMetre;
    const y = scale.height - 12;
    group.append(svg("path", { class: "scale", d: `M10 ${y - 5}v5h${long.toFixed(1)}v-5` }),
      svg("text", { x: 14 + long, y }, km + " km"));
    const [nx, ny] = scale.direction(0);
    const [cx, cy] = [this.width - 26, 48];
    group.append(svg("path", { class: "scale", d: `M${cx - nx * 18} ${cy - ny * 18}L${cx + nx * 18} ${cy + ny * 18}m${(-nx * 9 - ny * 6).toFixed(1)} ${(-ny * 9 + nx * 6).toFixed(1)}L${cx + nx * 18} ${cy + ny * 18}l${(-nx * 9 + ny * 6).toFixed(1)} ${(-ny * 9 - nx * 6).toFixed(1)}` }),
      svg("text", { x: cx + nx * 30, y: cy + ny * 30 + 5, "text-anchor": "middle" }, "N"));
    return group;
  }

  /** @param {any} body a step */
  draw(body) {
    this.body = body;
    if (!this.scale || !this.moving) return;
    this.labels = new Labels(this.width, this.scale.height, Math.max(14, parseFloat(getComputedStyle(this.host).fontSize) * 0.85));
    for (const m of this.layout.masts) {
      const [x, y] = this.scale.at([m.east_m, m.north_m]);
      this.labels.keep(x, y, 9);
    }
    for (const path of this.shown()) {
      for (let m = path.length_from_m; m > path.length_to_m; m -= 16 / this.scale.perMetre) {
        const [x, y] = this.scale.at(along(path, m));
        this.labels.keep(x, y, 7);
      }
    }
    const parts = [];
    for (const front of body.fronts || []) parts.push(this.front(front));
    for (const path of this.shown()) parts.push(this.path(path, body));
    for (const outflow of body.outflows || []) parts.push(this.outflow(outflow));
    this.stacks = new Map();
    for (const path of this.shown()) parts.push(this.places(path, this.open(path, body)));
    for (const mast of this.layout.masts) parts.push(this.mast(mast, body));
    // Texts come last and find their places in this order.
    this.thresholds(body);
    for (const [x, y, text] of this.told) this.labels.add(x, y, text);
    this.told = [];
    for (const front of body.fronts || []) this.arrivals(front);
    for (const mast of this.layout.masts) this.name(mast, body);
    this.moving.replaceChildren(...parts, this.labels.group);
  }

  /** Everything that is a value goes. */
  blank() {
    this.body = null;
    if (this.moving) this.moving.replaceChildren();
  }

  /** @param {any} path of the layout @param {any} body */
  path(path, body) {
    const scale = /** @type {Scale} */ (this.scale);
    const group = svg("g");
    const told = (body.paths || []).find((/** @type {any} */ p) => p.runway === path.runway && p.operation === path.operation);
    const from = path.length_from_m, to = path.length_to_m;
    if (!told) { // nothing is said of it, not even that it is not observed
      group.append(svg("path", { class: "unseen-edge", d: outline([scale.at(along(path, from)), scale.at(along(path, to))]) }));
      return group;
    }
    const observed = told.observed || [];
    const [sx, sy] = scale.direction(path.bearing_true_deg - 90); // to the left of who flies
    for (const [a, b] of unobserved(observed, from, to)) {
      const [p, q] = [scale.at(along(path, a)), scale.at(along(path, b))];
      /** @type {Place[]} */
      const corners = [[p[0] + sx * corridor, p[1] + sy * corridor], [q[0] + sx * corridor, q[1] + sy * corridor],
        [q[0] - sx * corridor, q[1] - sy * corridor], [p[0] - sx * corridor, p[1] - sy * corridor]];
      group.append(svg("path", { class: "unseen-ground", d: outline(corners, true) }), svg("path", { class: "unseen-edge", d: outline(corners, true) }));
    }
    for (const [a, b] of observed) {
      group.append(svg("path", { class: "seen", d: outline([scale.at(along(path, Math.min(a, from))), scale.at(along(path, Math.max(b, to)))]) }));
    }
    // Two paths over the same ground would cover each other's bars.
    if (path.operation === this.operation) group.append(this.bars(path, body, this.open(path, body)));
    return group;
  }

  /** The open alerts of a path that have a place. @param {any} path @param {any} body @returns {any[]} */
  open(path, body) {
    return (body.alerts || []).filter((/** @type {any} */ a) => a.runway === path.runway && a.operation === path.operation && typeof a.from_m === "number");
  }

  /** The headwind as short bars, on the left of who flies; a tailwind on the right. @param {any} path @param {any} body @param {any[]} open */
  bars(path, body, open) {
    const scale = /** @type {Scale} */ (this.scale);
    const group = svg("g");
    const profile = (body.profiles || []).find((/** @type {any} */ p) => p.runway === path.runway && p.operation === path.operation);
    if (!profile) return group;
    const [sx, sy] = scale.direction(path.bearing_true_deg - 90);
    const points = profile.points.filter((/** @type {any} */ p) => p.observed && p.headwind_kt !== null);
    // In the order of flight; the change counts from where the ground begins to be observed.
    points.sort((/** @type {any} */ a, /** @type {any} */ b) => b.at_m - a.at_m);
    let last = -Infinity;
    for (const p of points) {
      if (Math.abs(p.at_m - last) * scale.perMetre < 7) continue;
      last = p.at_m;
      const [x, y] = scale.at(along(path, p.at_m));
      const side = p.headwind_kt < 0 ? -1 : 1;
      const long = side * 5 + p.headwind_kt * pixelsPerKnot;
      const within = Math.max(0, ...open.filter((a) => p.at_m <= a.from_m && p.at_m >= a.to_m).map((a) => levelNumber(a.level)));
      const bar = svg("path", { class: "bar" + (within ? " raised" + within : ""), d: outline([[x + sx * 5 * side, y + sy * 5 * side], [x + sx * long, y + sy * long]]) });
      bar.style.stroke = changeColour(p.headwind_kt - points[0].headwind_kt);
      group.append(bar);
    }
    return group;
  }

  /** Where along the path an open alert is, by weight and word. @param {any} path @param {any[]} open */
  places(path, open) {
    const scale = /** @type {Scale} */ (this.scale);
    const group = svg("g");
    const [sx, sy] = scale.direction(path.bearing_true_deg + 90); // on the right, away from the bars
    // Paths of one bearing share a side: their alerts stand beside one another.
    const side = Math.round(path.bearing_true_deg);
    open.forEach((a) => {
      const before = this.stacks.get(side) || 0;
      this.stacks.set(side, before + 1);
      const off = 34 + before * 20;
      const [p, q] = [scale.at(along(path, a.from_m)), scale.at(along(path, a.to_m))];
      /** @type {Place[]} */
      const line = [[p[0] + sx * (off - 8), p[1] + sy * (off - 8)], [p[0] + sx * off, p[1] + sy * off], [q[0] + sx * off, q[1] + sy * off], [q[0] + sx * (off - 8), q[1] + sy * (off - 8)]];
      const word = kindWords(a.kind)[0].split(" ").pop();
      const at = scale.at(along(path, (a.from_m + a.to_m) / 2));
      group.append(svg("path", { class: "place place" + levelNumber(a.level), d: outline(line) }));
      this.told.push([at[0] + sx * off, at[1] + sy * off, (path.operation === "landing" ? "Landing " : "Take-off ") + path.runway + ": " + word + " " + (a.change_kt === null ? "" : knots(Math.abs(a.change_kt)) + " kt") + ", level " + levelNumber(a.level)]);
    });
    return group;
  }

  /** @param {any} body */
  thresholds(body) {
    const scale = /** @type {Scale} */ (this.scale);
    for (const r of this.layout.runways) {
      for (const e of r.ends) {
        const [x, y] = scale.at([e.east_m, e.north_m]);
        this.labels.add(x, y, e.designator + (body.runway_in_use === e.designator ? " in use" : ""), { bold: true, off: 14 });
      }
    }
  }

  /** @param {any} mast @param {any} body */
  mast(mast, body) {
    const scale = /** @type {Scale} */ (this.scale);
    const [x, y] = scale.at([mast.east_m, mast.north_m]);
    const health = (body.stations || []).find((/** @type {any} */ s) => s.id === mast.id);
    const state = health ? health.state : "unknown";
    const group = svg("g");
    const wind = health && health.live && health.wind ? health.wind.two_minutes : null;
    if (wind) group.append(barb(x, y, scale.direction(wind.from_deg), wind.speed_ms / knot, (this.layout.latitude_deg || 0) < 0));
    group.append(mastSign(x, y, state));
    return group;
  }

  /** @param {any} mast @param {any} body */
  name(mast, body) {
    const [x, y] = /** @type {Scale} */ (this.scale).at([mast.east_m, mast.north_m]);
    const health = (body.stations || []).find((/** @type {any} */ s) => s.id === mast.id);
    const state = health ? health.state : "unknown";
    this.labels.add(x, y, mast.id + (state === "live" ? "" : ": " + stateWords(state)), { quiet: true });
  }

  /** Half of the odds within the inner outline, 95 of 100 within the outer one. @param {any} o */
  outflow(o) {
    const scale = /** @type {Scale} */ (this.scale);
    const group = svg("g");
    for (const [name, points] of [["outer", o.outer], ["inner", o.inner]]) {
      if (points && points.length > 2) group.append(svg("path", { class: "outflow " + name, d: outline(points.map((/** @type {Place} */ p) => scale.at(p)), true) }));
    }
    const [x, y] = scale.at([o.centre.east_m, o.centre.north_m]);
    group.append(svg("path", { class: "scale", d: `M${x - 7} ${y}h14M${x} ${y - 7}v14` }));
    if (o.motion && o.motion.known) {
      const [ux, uy] = scale.direction(o.motion.toward_true_deg);
      const long = Math.min(120, Math.max(26, o.motion.speed_kt * knot * 120 * scale.perMetre)); // two minutes of motion
      const [ex, ey] = [x + ux * long, y + uy * long];
      group.append(svg("path", { class: "arrow", d: `M${x} ${y}L${ex} ${ey}M${ex - ux * 13 - uy * 8} ${ey - uy * 13 + ux * 8}L${ex} ${ey}L${ex - ux * 13 + uy * 8} ${ey - uy * 13 - ux * 8}` }));
    }
    const words = o.extent === "microburst" ? "microburst" : "outflow";
    this.told.push([x, y, words + (o.probability === undefined ? "" : ", " + odds(o.probability))]);
    return group;
  }

  /** One line with the band that it may lie in. @param {any} f */
  front(f) {
    const scale = /** @type {Scale} */ (this.scale);
    const group = svg("g");
    if (!f.line || f.line.length < 2) return group;
    const [a, b] = f.line.map((/** @type {Place} */ p) => scale.at(p));
    const [ux, uy] = scale.direction(f.toward_true_deg);
    const half = (f.band_m || 0) * scale.perMetre;
    /** @type {Place[]} */
    const band = [[a[0] + ux * half, a[1] + uy * half], [b[0] + ux * half, b[1] + uy * half], [b[0] - ux * half, b[1] - uy * half], [a[0] - ux * half, a[1] - uy * half]];
    const [mx, my] = [(a[0] + b[0]) / 2, (a[1] + b[1]) / 2];
    const [ex, ey] = [mx + ux * 34, my + uy * 34];
    group.append(svg("path", { class: "front-band", d: outline(band, true) }), svg("path", { class: "front-line", d: outline([a, b]) }),
      svg("path", { class: "arrow", d: `M${mx} ${my}L${ex} ${ey}M${ex - ux * 11 - uy * 7} ${ey - uy * 11 + ux * 7}L${ex} ${ey}L${ex - ux * 11 + uy * 7} ${ey - uy * 11 - ux * 7}` }));
    this.told.push([mx + ux * 30, my + uy * 30, f.kind === "wind-shift" ? "wind shift" : "gust front"]);
    return group;
  }

  /** When a front is at a threshold or mast. @param {any} f */
  arrivals(f) {
    const scale = /** @type {Scale} */ (this.scale);
    for (const arrival of f.arrivals || []) {
      const [x, y] = scale.at([arrival.east_m, arrival.north_m]);
      this.labels.add(x, y, (arrival.arrived ? "front since " : "front at ") + timeOf(arrival.at));
    }
  }
}
