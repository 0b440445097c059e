// Takes which of the two sounds is due and makes it with the browser's own
// synthesiser. A browser may forbid sound until the page has been touched: that
// is found out and said, since silence must not be taken for quiet.

/**
 * The two patterns. They differ in pitch by far more than a fifth, in length
 * and in rhythm; all tones lie from 500 to 3000 Hz.
 * @type {Record<string, {tones: [number, number, number][], every: number}>} tones: Hz, start and length in s
 */
const patterns = {
  first: { tones: [[740, 0, 0.28], [740, 0.42, 0.28]], every: 6 },
  second: { tones: [[1320, 0, 0.12], [1760, 0.14, 0.12], [1320, 0.28, 0.12], [1760, 0.42, 0.12], [1320, 0.56, 0.12], [1760, 0.7, 0.12]], every: 2.5 },
};

const rank = ["none", "first", "second"];

export class Sound {
  /** @param {() => void} changed called when its state has changed */
  constructor(changed) {
    this.changed = changed;
    this.due = "none";
    this.next = 0;
    /** @type {AudioContext | null} */
    this.context = null;
    this.on = read() !== "off";
    // Any touch or key lets a browser make sound from then on.
    for (const name of ["pointerdown", "keydown"]) {
      window.addEventListener(name, () => { if (this.on) void this.wake(); }, { capture: true });
    }
    window.setInterval(() => this.tick(), 250);
  }

  /** One word: on, off, blocked. */
  state() {
    if (!this.on) return "off";
    return this.context && this.context.state === "running" ? "on" : "blocked";
  }

  /** @param {boolean} on */
  async set(on) {
    this.on = on;
    try {
      localStorage.setItem("sockline.sound", on ? "on" : "off");
    } catch {
      // then it holds for this page only
    }
    if (on) await this.wake();
    this.changed();
  }

  async wake() {
    if (!this.context) {
      this.context = new AudioContext();
      this.context.addEventListener("statechange", () => this.changed());
    }
    if (this.context.state !== "running") {
      try {
        await this.context.resume();
      } catch {
        // it stays blocked, and the page says so
      }
    }
    this.changed();
  }

  /** Asks the browser once, without a touch, whether sound is allowed. */
  probe() {
    if (this.on) void Promise.race([this.wake(), new Promise((done) => window.setTimeout(done, 300))]).then(() => this.changed());
  }

  /** @param {string} which none, first or second */
  want(which) {
    // A rise sounds at once; otherwise the pattern goes on in its rhythm.
    if (rank.indexOf(which) > rank.indexOf(this.due)) this.next = 0;
    this.due = which;
  }

  tick() {
    const pattern = patterns[this.due];
    if (!pattern || this.state() !== "on" || performance.now() < this.next) return;
    this.next = performance.now() + pattern.every * 1000;
    this.play(this.due);
  }

  /** @param {string} which @param {number} [after] in s */
  play(which, after = 0) {
    if (!this.context || this.context.state !== "running") return;
    const context = this.context;
    for (const [pitch, start, length] of patterns[which].tones) {
      const begin = context.currentTime + after + start;
      const tone = context.createOscillator();
      const volume = context.createGain();
      tone.type = "triangle";
      tone.frequency.value = pitch;
      // Soft edges: a hard one clicks over the whole band.
      volume.gain.setValueAtTime(0, begin);
      volume.gain.linearRampToValueAtTime(0.5, begin + 0.015);
      volume.gain.setValueAtTime(0.5, begin + length - 0.02);
      volume.gain.linearRampToValueAtTime(0, begin + length);
      tone.connect(volume).connect(context.destination);
      tone.start(begin);
      tone.stop(begin + length + 0.01);
    }
  }

  /** Both, one after the other. */
  async test() {
    await this.wake();
    this.play("first");
    this.play("second", 1.2);
  }
}

function read() {
  try {
    return localStorage.getItem("sockline.sound") || "on";
  } catch {
    return "on";
  }
}

/** The sound that the occurrences ask for. @param {any[]} occurrences */
export function soundDue(occurrences) {
  return occurrences.reduce((most, o) => (rank.indexOf(o.sound) > rank.indexOf(most) ? o.sound : most), "none");
}
