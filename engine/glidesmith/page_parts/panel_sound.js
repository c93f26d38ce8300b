// Sound through the browser, where the engine has no sound card: samples are asked for as they are played.

const FIRST_BUFFER_S = 0.06;
const MOST_BUFFER_S = 0.6;
const GROWTH = 1.5; // of the buffer, whenever it has run dry
const LEAST_ASKED = 512;
const MOST_ASKED = 8192;
const LOST_MS = 700; // what has not come by then was never sent

class BrowserSound extends EventTarget {
  constructor(link, trace, rate, token) {
    super();
    Object.assign(this, { link, trace, rate, token, context: null, wanted: false, isListener: false });
    this.buffer = FIRST_BUFFER_S;
    this.reset();
    link.addEventListener("sound", ({ detail }) => this.take(detail));
  }

  reset() {
    this.asked = 0;
    this.askedAt = 0;
    this.report = null;
  }

  // Only after a click: until then browsers let nothing sound.
  async start(take) {
    this.wanted = true;
    if (this.context === null) await this.prepare();
    await this.context.resume();
    this.link.send({ do: "listen", on: true, take });
  }

  async prepare() {
    const context = new AudioContext({ sampleRate: this.rate, latencyHint: "interactive" });
    if (context.sampleRate !== this.rate) throw new Error(`this browser plays at ${context.sampleRate} Hz, not at ${this.rate}`);
    await context.audioWorklet.addModule(`player.js?token=${encodeURIComponent(this.token)}`);
    this.node = new AudioWorkletNode(context, "player", { numberOfInputs: 0, outputChannelCount: [1] });
    this.node.port.onmessage = ({ data }) => this.follow(data);
    this.node.connect(context.destination);
    this.node.port.postMessage({ enough: this.enough });
    this.context = context;
  }

  get enough() {
    return Math.round(0.75 * this.buffer * this.rate);
  }

  stop() {
    this.wanted = false;
    this.link.send({ do: "listen", on: false });
    this.rest();
  }

  // Nothing more comes; what is in the ring is not played either.
  rest() {
    this.isListener = false;
    this.trace.heardByPlayer = null;
    this.node?.port.postMessage({ pause: true });
    this.context?.suspend();
    this.reset();
  }

  // Who listens is for the engine to say.
  setListener(isMe) {
    if (this.isListener && !isMe) this.rest();
    this.isListener = isMe;
    if (!isMe) return;
    this.reset();
    this.trace.heardByPlayer = () => this.heard();
    this.ask(0);
  }

  take({ first, samples }) {
    this.asked = Math.max(0, this.asked - samples.length);
    if (this.isListener) this.node.port.postMessage({ first, samples });
  }

  follow(report) {
    if (this.report && report.starved > this.report.starved) {
      this.buffer = Math.min(GROWTH * this.buffer, MOST_BUFFER_S);
      this.node.port.postMessage({ enough: this.enough });
    }
    this.report = report;
    if (this.isListener) this.ask(report.fill);
  }

  ask(fill) {
    const now = performance.now();
    if (now - this.askedAt > LOST_MS) this.asked = 0;
    const missing = Math.round(this.buffer * this.rate) - fill - this.asked;
    if (missing < LEAST_ASKED) return;
    const count = Math.min(missing, MOST_ASKED);
    this.asked += count;
    this.askedAt = now;
    this.link.ask({ do: "frames", count, starved: this.report?.starved ?? 0, latency_s: this.latency });
  }

  // From a sample made to the same sample heard.
  get latency() {
    const output = this.context ? this.context.outputLatency || this.context.baseLatency || 0 : 0;
    return (this.report?.fill ?? 0) / this.rate + output;
  }

  heard() {
    if (!this.report) return 0;
    const late = this.context.outputLatency || this.context.baseLatency || 0;
    return this.report.played + this.rate * (this.context.currentTime - this.report.time - late);
  }
}
