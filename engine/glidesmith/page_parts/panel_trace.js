// What was played, row by row, and which of it is heard at this moment.

const KEPT_ROWS = 16384; // over a minute at 250 a second
const ROW_FIELDS = ["position", "target", "pitch", "gate", "control", "gain", "slot"];
const CLOCK_SLACK_S = 0.25; // an estimate that is farther off than this begins anew
const CLOCK_GIVE = 0.05;

class Trace {
  constructor(sampleRate) {
    this.rate = sampleRate;
    this.samples = new Float64Array(KEPT_ROWS);
    this.columns = Object.fromEntries(ROW_FIELDS.map((name) => [name, new Float32Array(KEPT_ROWS)]));
    this.count = 0;
    this.offset = null; // sample = offset + rate * (time in s), for what was just made
    this.newest = null;
    this.latency = 0; // seconds from a sample made to the same sample heard
    this.heardByPlayer = null; // a function, where the browser itself plays
  }

  take(frame) {
    const { sample, rows } = frame;
    if (this.newest !== null && sample < this.newest.sample) this.forget();
    this.newest = frame;
    for (let at = 0; at < rows.length; at += ROW.size) {
      const slot = this.count % KEPT_ROWS;
      this.samples[slot] = sample - rows[at + ROW.back];
      for (const name of ROW_FIELDS) this.columns[name][slot] = rows[at + ROW[name]];
      this.count += 1;
    }
    const offset = sample - this.rate * (performance.now() / 1000);
    const off = this.offset === null ? Infinity : Math.abs(offset - this.offset) / this.rate;
    this.offset = off > CLOCK_SLACK_S ? offset : this.offset + CLOCK_GIVE * (offset - this.offset);
  }

  // The engine was started anew.
  forget() {
    this.count = 0;
    this.offset = null;
  }

  // The sample that is at the ear now; never one that has not been made.
  heard() {
    if (this.newest === null) return 0;
    if (this.heardByPlayer) return Math.min(this.heardByPlayer(), this.newest.sample);
    const estimate = this.offset + this.rate * (performance.now() / 1000 - this.latency);
    return Math.min(estimate, this.newest.sample);
  }

  sampleAt(index) {
    return this.samples[index % KEPT_ROWS];
  }

  value(name, index) {
    return this.columns[name][index % KEPT_ROWS];
  }

  get first() {
    return Math.max(0, this.count - KEPT_ROWS);
  }

  // The index of the first row after a sample.
  after(sample) {
    let low = this.first;
    let high = this.count;
    while (low < high) {
      const middle = (low + high) >> 1;
      if (this.sampleAt(middle) <= sample) low = middle + 1;
      else high = middle;
    }
    return low;
  }

  // All that is known of a sample, between the rows; null before there is any.
  at(sample) {
    const next = this.after(sample);
    const before = Math.max(next - 1, this.first);
    if (this.count === 0) return null;
    const last = Math.min(next, this.count - 1);
    const span = this.sampleAt(last) - this.sampleAt(before);
    const part = span > 0 ? clamp((sample - this.sampleAt(before)) / span, 0, 1) : 0;
    const mixed = (name) => this.value(name, before) + part * (this.value(name, last) - this.value(name, before));
    const wraps = this.value("position", last) < this.value("position", before);
    return {
      index: before,
      position: wraps ? this.value("position", before) + (sample - this.sampleAt(before)) / this.rate : mixed("position"),
      target: this.value("target", before), pitch: mixed("pitch"), gate: this.value("gate", before),
      control: mixed("control"), gain: mixed("gain"), slot: this.value("slot", before),
    };
  }
}
