// Takes what the program says of itself - its version, how it runs, the
// configuration in force - and shows it.

import { byId, el } from "./dom.js";
import { read } from "./ask.js";
import { live } from "./live.js";
import { conditionWords, dayAndTime } from "./words.js";

/** @param {string} name @param {any} value @returns {HTMLElement[]} */
function fact(name, value) {
  if (value === null || value === undefined || value === "") return [];
  return [el("dt", null, name), el("dd", null, String(value))];
}

/** A configuration as it is given: a text, or an object that is shown as one. @param {any} c */
function configuration(c) {
  return el("pre", { tabindex: 0 }, typeof c === "string" ? c : JSON.stringify(c, null, 2));
}

let shown = false;

async function ask() {
  const host = byId("configuration");
  try {
    const basis = await read("/api/v1/basis");
    const facts = [...fact("Version", basis.version), ...fact("Go", basis.go), ...fact("Built from", basis.build || basis.revision), ...fact("Instance", basis.instance),
      ...fact("Running since", basis.started ? dayAndTime(basis.started) + " UTC" : ""), ...fact("Configuration in force since", basis.configuration_since ? dayAndTime(basis.configuration_since) + " UTC" : ""),
      ...fact("Its fingerprint", basis.configuration_hash || basis.fingerprint)];
    if (facts.length) byId("running").prepend(el("dl", null, ...facts));
    if (Array.isArray(basis.method) && basis.method.length) byId("method").replaceChildren(...basis.method.map((/** @type {any} */ m) => el("li", null, String(m))));
    host.replaceChildren(basis.configuration ? configuration(basis.configuration) : el("p", null, "The program does not give its configuration."));
  } catch (e) {
    host.replaceChildren(el("p", null, e instanceof Error ? e.message : String(e)));
  }
}

live({
  step(body) {
    const status = body.status || {};
    const facts = [
      ...fact("Condition", conditionWords(body.condition)[0]), ...fact("Version", status.version), ...fact("Instance", status.instance),
      ...fact("Masts", status.stations ? status.stations.live + " of " + status.stations.total + " serve ground" : ""),
      ...fact("Broker", status.broker ? (status.broker.connected ? "connected" : "not connected") + (status.broker.subscribed ? ", subscribed" : ", not subscribed") : ""),
      ...fact("Clock of this machine", status.clock_offset_s === undefined ? "" : Number(status.clock_offset_s).toFixed(1) + " s beside that of the masts"),
      ...fact("History", status.history ? (status.history.degraded ? "degraded: " + status.history.reason : "recorded") : ""),
      ...fact("Remarks", (status.remarks || []).join(" ")),
    ];
    if (!shown) {
      shown = true;
      byId("running").replaceChildren(el("dl", { id: "status" }));
      void ask();
    }
    byId("status").replaceChildren(...facts);
  },
  blank(why) {
    shown = false;
    byId("running").replaceChildren(el("p", null, "No information. " + why));
  },
});
