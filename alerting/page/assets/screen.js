// Takes what is chosen for this screen - its light, its size, how far away it
// is read - and keeps it in this browser. light.js sets it before the first
// paint of every page.

import { el, setText } from "./dom.js";
import { choice, labelled } from "./forms.js";

/** Width of a card after ISO/IEC 7810, format ID-1, in mm: everybody has one at hand. */
const card = 85.6;

/** @param {string} key @param {string} value */
function keep(key, value) {
  try {
    localStorage.setItem("sockline." + key, value);
  } catch {
    return; // storage is forbidden; the choice cannot be kept
  }
  window.dispatchEvent(new Event("sockline-screen"));
}

/** @type {[string, string][]} */
const lights = [["day", "Day"], ["dusk", "Dusk"], ["night", "Night"], ["late", "Darkest night"]];

/** @param {HTMLElement} host */
export function screenSettings(host) {
  const root = document.documentElement;
  const buttons = lights.map(([value, word]) => el("button", { type: "button", "data-light-choice": value, onclick: () => {
    keep("light", value);
    root.dataset.light = value; // also where it cannot be kept
    pressed();
  } }, word));
  const pressed = () => buttons.forEach((b) => b.setAttribute("aria-pressed", String(b.dataset.lightChoice === root.dataset.light)));
  pressed();

  const distance = choice([["0.6", "0.6 m, in the hand"], ["1.2", "1.2 m, at a desk"], ["2", "2 m, across a desk"], ["3", "3 m, on a wall"]], root.dataset.distance);
  distance.addEventListener("change", () => keep("distance", distance.value));

  const bar = el("span", { class: "card", "aria-hidden": "true" });
  const told = el("output", null);
  const pitch = el("input", { type: "range", min: 0.08, max: 0.6, step: 0.001, value: root.dataset.pitch || "0.277" });
  const show = () => {
    bar.style.width = (card / Number(pitch.value)).toFixed(0) + "px";
    setText(told, Number(pitch.value).toFixed(3) + " mm a pixel");
  };
  pitch.addEventListener("input", show);
  pitch.addEventListener("change", () => keep("pitch", pitch.value));
  show();

  const still = el("input", { type: "checkbox" });
  still.checked = root.dataset.still === "yes";
  still.addEventListener("change", () => keep("still", still.checked ? "yes" : "no"));
  const stillLabel = labelled("Nothing flashes", still);
  stillLabel.className = "inline";
  host.replaceChildren(
    el("div", { class: "choices", role: "group", "aria-label": "Light" }, ...buttons),
    el("form", { class: "calibrate" }, labelled("Read from", distance),
      labelled("Size of a pixel: move until the bar is as wide as a bank card", pitch, "wide"), told, stillLabel),
    bar);
}
