// Runs before the first paint: takes the light and the sizes that were chosen
// for this screen, and sets them on the root element. Next is the module of the
// view.
"use strict";
(() => {
  const root = document.documentElement;
  const stack = '"DejaVu Sans", "Segoe UI", Roboto, "Noto Sans", Arial, sans-serif';

  /** @param {string} key @returns {string} */
  function kept(key) {
    try {
      return localStorage.getItem("sockline." + key) || "";
    } catch {
      return ""; // storage may be forbidden; the defaults serve
    }
  }

  /** Height of a capital in the page's own face, as a part of the font size. */
  function capital() {
    const context = document.createElement("canvas").getContext("2d");
    if (!context) return 0.7;
    context.font = "100px " + stack;
    const high = context.measureText("H").actualBoundingBoxAscent / 100;
    return high > 0.4 && high < 1 ? high : 0.7;
  }

  // Heights that can be read at 2 m: 16 minutes of arc for all, 22 for the
  // amount (MIL-STD-1472 and NUREG-0700 as cited for displays, from memory).
  // They grow with the distance and are turned into pixels by the pitch.
  function sizes() {
    const wide = window.innerWidth;
    const phone = wide < 700;
    const pitch = Number(kept("pitch")) || (phone ? 0.16 : 0.277); // mm of one CSS pixel
    const distance = Number(kept("distance")) || (phone ? 0.6 : wide >= 1600 ? 2 : 1.2); // m
    const cap = capital();
    const font = (/** @type {number} */ mm) => ((mm * distance) / 2 / pitch) / cap;
    const glance = Math.max(16, font(9.3));
    root.style.setProperty("--glance", glance.toFixed(1) + "px");
    root.style.setProperty("--big", Math.max(22, font(12.8)).toFixed(1) + "px");
    root.style.setProperty("--read", Math.max(15, Math.min(font(4.65), 26)).toFixed(1) + "px");
    root.style.setProperty("--mark", Math.max(44, (25 * distance) / 2 / pitch).toFixed(1) + "px");
    root.dataset.pitch = String(pitch);
    root.dataset.distance = String(distance);
  }

  function light() {
    const chosen = kept("light");
    if (["day", "dusk", "night", "late"].includes(chosen)) root.dataset.light = chosen;
    else root.dataset.light = matchMedia("(prefers-color-scheme: dark)").matches ? "dusk" : "day";
    if (kept("still") === "yes") root.dataset.still = "yes";
    else delete root.dataset.still;
  }

  light();
  sizes();
  window.addEventListener("resize", sizes);
  // A change made in this window or in another one takes effect at once.
  window.addEventListener("storage", () => { light(); sizes(); });
  window.addEventListener("sockline-screen", () => { light(); sizes(); });
})();
