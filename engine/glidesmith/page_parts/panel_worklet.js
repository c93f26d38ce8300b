// The player in the browser's audio thread: a ring of samples that are given out at the browser's own pace.

const RING = 1 << 17;
const FADE = 128; // samples, about 3 ms: where the ring runs dry, and where it goes on
const REPORT = 512; // samples between reports

class Player extends AudioWorkletProcessor {
  constructor() {
    super();
    this.ring = new Float32Array(RING);
    this.read = 0; // the number, counted from the deck's start, of the sample given out next
    this.end = 0; // of the one that comes after those in the ring
    this.enough = RING; // from so many on it begins, and begins again
    this.gain = 0;
    this.running = false;
    this.starved = 0;
    this.since = 0;
    this.port.onmessage = ({ data }) => this.take(data);
  }

  take({ first, samples, enough, pause }) {
    if (enough !== undefined) this.enough = enough;
    if (pause) this.running = false;
    if (samples === undefined) return;
    if (first !== this.end || this.end - this.read + samples.length > RING) [this.read, this.running] = [first, false];
    for (let index = 0; index < samples.length; index++) this.ring[(first + index) % RING] = samples[index];
    this.end = first + samples.length;
  }

  process(inputs, [[output]]) {
    const fill = this.end - this.read;
    if (!this.running && fill >= this.enough) [this.running, this.gain] = [true, 0];
    if (this.running && fill >= output.length) this.give(output, fill < output.length + FADE);
    else output.fill(0);
    this.since += output.length;
    if (this.since >= REPORT) this.report();
    return true;
  }

  // The last block before the ring runs dry goes down to nothing, so that no step is heard.
  give(output, isLast) {
    const step = 1 / FADE;
    for (let index = 0; index < output.length; index++) {
      this.gain = isLast ? Math.max(0, this.gain - step) : Math.min(1, this.gain + step);
      output[index] = this.gain * this.ring[(this.read + index) % RING];
    }
    this.read += output.length;
    if (!isLast) return;
    this.running = false;
    this.starved += 1;
  }

  report() {
    this.since = 0;
    this.port.postMessage({ played: this.read, fill: this.end - this.read, starved: this.starved, time: currentTime });
  }
}

registerProcessor("player", Player);
