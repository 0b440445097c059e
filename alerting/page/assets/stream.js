// Takes the address of the stream and gives each step and each issue of an
// alert once, in order. It comes back by itself with the id of the last event
// it has had, and gives up a connection on which nothing comes.
// Next is live.js.

/** Nothing heard for so long: the connection is given up, in ms. */
const silentAfter = 5000;

/**
 * @typedef {object} Handlers
 * @property {(body: any) => void} step each whole view
 * @property {(issue: any) => void} alert each issue of an alert, once
 * @property {(body: any) => void} resync issues may have been missed
 * @property {(open: boolean, why: string) => void} link
 */

/**
 * Takes bytes of server-sent events apart (WHATWG HTML, 9.2.6 "Interpreting an
 * event stream"). A piece may end anywhere, also between the two characters of
 * a line end.
 */
export class Parser {
  /** @param {(name: string, data: string, id: string) => void} dispatch */
  constructor(dispatch) {
    this.dispatch = dispatch;
    this.decoder = new TextDecoder();
    this.rest = "";
    this.name = "";
    /** @type {string[]} */
    this.data = [];
    this.id = "";
    this.afterReturn = false;
  }

  /** @param {Uint8Array} bytes */
  push(bytes) {
    let text = this.decoder.decode(bytes, { stream: true });
    if (this.afterReturn && text.startsWith("\n")) text = text.slice(1);
    if (text !== "") this.afterReturn = text.endsWith("\r");
    const lines = (this.rest + text).split(/\r\n|\r|\n/);
    this.rest = lines.pop() || "";
    for (const line of lines) this.line(line);
  }

  /** @param {string} line */
  line(line) {
    if (line === "") {
      if (this.data.length > 0) this.dispatch(this.name || "message", this.data.join("\n"), this.id);
      this.name = "";
      this.data = [];
      return;
    }
    if (line.startsWith(":")) return; // a heartbeat: that it came is all it says
    const colon = line.indexOf(":");
    const field = colon < 0 ? line : line.slice(0, colon);
    let value = colon < 0 ? "" : line.slice(colon + 1);
    if (value.startsWith(" ")) value = value.slice(1);
    if (field === "event") this.name = value;
    else if (field === "data") this.data.push(value);
    else if (field === "id" && !value.includes("\0")) this.id = value;
  }
}

/** @param {string} id @returns {[string, number]} instance and number */
export function placeOf(id) {
  const dash = id.lastIndexOf("-");
  return [id.slice(0, dash), Number(id.slice(dash + 1))];
}

export class Stream {
  /** @param {string} address @param {Handlers} handlers */
  constructor(address, handlers) {
    this.address = address;
    this.handlers = handlers;
    this.last = ""; // id of the newest event
    this.told = ""; // id of the newest issue of an alert
    this.tries = 0;
    this.heard = performance.now();
    /** @type {AbortController | null} */
    this.control = null;
    this.stopped = false;
  }

  start() {
    void this.run();
    window.setInterval(() => {
      if (this.control && performance.now() - this.heard > silentAfter) this.control.abort();
    }, 500);
    // A page that is left gives its connection back at once.
    window.addEventListener("pagehide", () => this.stop());
    window.addEventListener("pageshow", (e) => {
      if (!e.persisted) return;
      this.stopped = false;
      void this.run();
    });
  }

  stop() {
    this.stopped = true;
    if (this.control) this.control.abort();
  }

  async run() {
    while (!this.stopped) {
      const why = await this.once();
      if (this.stopped) return;
      this.handlers.link(false, why);
      // The first try comes at once; many browsers come back spread over time.
      const wait = Math.min(3000, 250 * this.tries) * (0.5 + Math.random());
      this.tries++;
      await new Promise((done) => window.setTimeout(done, wait));
    }
  }

  /** One connection until it ends. @returns {Promise<string>} why it ended */
  async once() {
    this.control = new AbortController();
    this.heard = performance.now();
    try {
      /** @type {Record<string, string>} */
      const headers = { "Accept": "text/event-stream" };
      if (this.last) headers["Last-Event-ID"] = this.last;
      const answer = await fetch(this.address, { headers, signal: this.control.signal, cache: "no-store", credentials: "same-origin" });
      if (answer.status === 401) return "You are no longer logged in.";
      if (!answer.ok || !answer.body) return "The program refuses the stream (" + answer.status + ").";
      const parser = new Parser((name, data, id) => this.event(name, data, id));
      const reader = answer.body.getReader();
      this.handlers.link(true, "");
      for (;;) {
        const { done, value } = await reader.read();
        if (done) return "The program has ended the stream.";
        this.heard = performance.now();
        parser.push(value);
      }
    } catch (e) {
      return this.control.signal.aborted ? "Nothing came for five seconds." : "The program cannot be reached.";
    } finally {
      this.control = null;
    }
  }

  /** @param {string} name @param {string} data @param {string} id */
  event(name, data, id) {
    const body = JSON.parse(data);
    this.tries = 0;
    if (id) this.last = id;
    if (name === "now") this.handlers.step(body);
    else if (name === "resync") {
      this.told = id; // what comes next counts from here
      this.handlers.resync(body);
    } else if (name === "alert" && this.isNew(id)) this.handlers.alert(body);
  }

  /** Whether an issue has not been had before. @param {string} id */
  isNew(id) {
    const [run, number] = placeOf(id);
    const [lastRun, lastNumber] = placeOf(this.told);
    if (run === lastRun && number <= lastNumber) return false;
    this.told = id;
    return true;
  }
}
