// Takes names, attributes and text, and makes nodes of them. Text stays text:
// nothing here or elsewhere in the page makes markup of a string.
// Next are the modules that draw.

const svgSpace = "http://www.w3.org/2000/svg";

/** @typedef {Node | string | number | null | undefined | false} Child */
/** @typedef {Record<string, string | number | boolean | null | undefined | ((e: any) => void)>} Attributes */

/**
 * @param {Element} node
 * @param {Attributes | null} attributes what starts with "on" is a listener
 * @param {Child[]} children
 */
function fill(node, attributes, children) {
  for (const [name, value] of Object.entries(attributes || {})) {
    if (value === null || value === undefined || value === false) continue;
    if (typeof value === "function") node.addEventListener(name.slice(2), value);
    else node.setAttribute(name, value === true ? "" : String(value));
  }
  for (const child of children) {
    if (child === null || child === undefined || child === false || child === "") continue;
    node.append(child instanceof Node ? child : String(child));
  }
}

/**
 * @template {keyof HTMLElementTagNameMap} K
 * @param {K} tag
 * @param {Attributes | null} [attributes]
 * @param {...Child} children
 * @returns {HTMLElementTagNameMap[K]}
 */
export function el(tag, attributes, ...children) {
  const node = document.createElement(tag);
  fill(node, attributes || null, children);
  return node;
}

/**
 * @template {keyof SVGElementTagNameMap} K
 * @param {K} tag
 * @param {Attributes | null} [attributes]
 * @param {...Child} children
 * @returns {SVGElementTagNameMap[K]}
 */
export function svg(tag, attributes, ...children) {
  const node = /** @type {SVGElementTagNameMap[K]} */ (document.createElementNS(svgSpace, tag));
  fill(node, attributes || null, children);
  return node;
}

/**
 * The element with this id; the templates hold it, or the page is broken.
 * @param {string} id
 * @returns {HTMLElement}
 */
export function byId(id) {
  const node = document.getElementById(id);
  if (!node) throw new Error("the page has no element " + id);
  return node;
}

/**
 * Sets text where it differs, so that nothing is announced or laid out twice.
 * @param {Element} node
 * @param {string} text
 */
export function setText(node, text) {
  if (node.textContent !== text) node.textContent = text;
}

/**
 * Keeps one node for each item, in the order of the items, so that focus stays
 * where it is while the values change.
 * @template T
 * @param {Element} parent
 * @param {T[]} items
 * @param {(item: T) => string} keyOf
 * @param {(item: T) => HTMLElement} make
 * @param {(node: HTMLElement, item: T) => void} update
 */
export function keyed(parent, items, keyOf, make, update) {
  /** @type {Map<string, HTMLElement>} */
  const had = new Map();
  for (const child of Array.from(parent.children)) {
    if (child instanceof HTMLElement && child.dataset.key !== undefined) had.set(child.dataset.key, child);
    else child.remove();
  }
  /** @type {Element | null} */
  let before = null;
  for (const item of items) {
    const key = keyOf(item);
    let node = had.get(key);
    if (!node) {
      node = make(item);
      node.dataset.key = key;
    }
    had.delete(key);
    update(node, item);
    /** @type {Element | null} */
    const place = before ? before.nextElementSibling : parent.firstElementChild;
    if (place !== node) parent.insertBefore(node, place);
    before = node;
  }
  for (const node of had.values()) node.remove();
}

/**
 * The shape of a condition, drawn as the templates draw it.
 * @param {string} shape full, half, empty or none
 * @returns {SVGSVGElement}
 */
export function mark(shape) {
  const node = svg("svg", { class: "mark", viewBox: "0 0 96 96", "aria-hidden": "true" });
  if (shape === "full" || shape === "half") node.append(svg("circle", { class: "line", cx: 48, cy: 48, r: 40 }));
  if (shape === "full") node.append(svg("circle", { class: "fill", cx: 48, cy: 48, r: 27 }));
  else if (shape === "half") node.append(svg("path", { class: "fill", d: "M48 21a27 27 0 0 0 0 54z" }));
  else if (shape === "empty") {
    node.append(svg("circle", { class: "line dashed", cx: 48, cy: 48, r: 40 }), svg("path", { class: "line", d: "M20 76 76 20" }));
  } else {
    node.append(svg("path", { class: "line", d: "M10 10h76v76h-76z" }), svg("path", { class: "line", d: "m10 10 76 76m-76 0 76-76" }));
  }
  return node;
}
