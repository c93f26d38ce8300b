// Playing: all clips start together and only gains change, so that a change of clip keeps the position.

const SWITCH_S = 0.01; // a change of clip: one goes down while the other comes up
const SEAM_S = 0.005; // where a loop closes, and where a clip begins or is cut
const AHEAD_S = 0.03; // how far ahead of the clock a change is asked for, so that none comes late
const PLANNED_S = 2.5; // passes of a loop are planned this far ahead, for tabs whose timers are slowed down
const SILENT_S = 0.075; // blind: how long nothing is heard when the clip is changed
const HEARD_S = 0.5; // a clip that was heard for so long counts as heard
const SHORTEST_LOOP_S = 0.05;
const LOWEST_DB = -60;

// A gain that goes from point to point in straight lines.
class Fader {
  constructor(context, value) {
    this.node = context.createGain();
    this.node.gain.value = value;
    this.node.gain.setValueAtTime(value, 0);
    this.points = [[0, value]];
  }

  valueAt(time) {
    let [before, value] = this.points[0];
    for (const [after, next] of this.points) {
      if (after > time) return value + ((next - value) * (time - before)) / (after - before);
      [before, value] = [after, next];
    }
    return value;
  }

  // From `start` on, through these points; up to then, as it was going.
  follow(start, ...points) {
    const value = this.valueAt(start);
    const kept = this.points.filter(([time]) => time < start).slice(-4);
    this.points = [...kept, [start, value], ...points];
    this.node.gain.cancelScheduledValues(start);
    for (const [time, level] of [[start, value], ...points]) this.node.gain.linearRampToValueAtTime(level, time);
  }
}

// One stretch of playing without a jump: passes over the clips, one after the other.
class Run {
  constructor(context, output, clips, chosen, discreet) {
    this.context = context;
    this.clips = clips;
    this.chosen = chosen;
    this.discreet = discreet;
    this.passes = [];
    this.output = new Fader(context, 0);
    this.output.node.connect(output);
    this.faders = clips.map((_, index) => new Fader(context, index === chosen ? 1 : 0));
    for (const fader of this.faders) fader.node.connect(this.output.node);
  }

  get end() {
    const last = this.passes.at(-1);
    return last.when + last.length;
  }

  // The first pass comes in with the run itself, the others fade in over the end of the one before.
  addPass(when, offset, length) {
    const from = this.passes.length === 0 ? 1 : 0;
    const sources = this.clips.map((clip, index) => {
      const source = this.context.createBufferSource();
      const edge = this.context.createGain();
      source.buffer = clip;
      edge.gain.setValueAtTime(from, when);
      edge.gain.linearRampToValueAtTime(1, when + SEAM_S);
      edge.gain.setValueAtTime(1, when + length);
      edge.gain.linearRampToValueAtTime(0, when + length + SEAM_S);
      source.connect(edge).connect(this.faders[index].node);
      source.addEventListener("ended", () => edge.disconnect());
      return source;
    });
    for (const source of sources) source.start(when, offset, length + SEAM_S);
    this.passes = this.passes.filter((pass) => pass.when + pass.length > this.context.currentTime - 1);
    this.passes.push({ when, offset, length, sources });
  }

  positionAt(time) {
    const pass = this.passes.findLast(({ when }) => when <= time) ?? this.passes[0];
    return pass.offset + clamp(time - pass.when, 0, pass.length);
  }

  begin(when) {
    this.output.follow(when, [when + SWITCH_S, 1]);
  }

  finish(when) {
    this.output.follow(when, [when + SWITCH_S, 0]);
    for (const { sources } of this.passes) {
      for (const source of sources) source.stop(when + 2 * SWITCH_S);
    }
    setTimeout(() => this.output.node.disconnect(), 1000 * (when - this.context.currentTime + 1));
  }

  choose(index, when) {
    if (index === this.chosen) return;
    this.chosen = index;
    this.faders.forEach((fader, other) => {
      if (other !== index) fader.follow(when, [when + SWITCH_S, 0]);
      else if (!this.discreet) fader.follow(when, [when + SWITCH_S, 1]);
      else this.riseAfterSilence(fader, when);
    });
  }

  // The joint of two clips that differ can be heard, and that of a clip with itself can't: silence hides both.
  riseAfterSilence(fader, when) {
    const up = when + SWITCH_S + SILENT_S;
    fader.follow(when, [when + SWITCH_S, 0], [up, 0], [up + SWITCH_S, 1]);
  }
}

class Sound extends EventTarget {
  constructor(sampleRate) {
    super();
    this.sampleRate = sampleRate;
    this.context = null;
    this.run = null;
    this.wish = null; // stands for a start that is still wanted while the audio starts
    this.counted = 0;
    this.levelDb = -20;
    this.load([], 0);
    setInterval(() => this.tend(), 200);
  }

  // What is to be played, all of it cut to one length. Discreet: see Run.
  load(clips, length, { discreet = false } = {}) {
    this.pause();
    Object.assign(this, { clips, length, discreet, chosen: 0, loop: null, rest: 0, listened: clips.map(() => 0) });
  }

  // On the nearest sample: between two, a clip would have to be interpolated.
  onSample(time) {
    const rate = this.context?.sampleRate ?? this.sampleRate;
    return Math.round(time * rate) / rate;
  }

  // The earliest time for which a change may be asked for.
  get soon() {
    return this.onSample(this.context.currentTime + AHEAD_S);
  }

  get playing() {
    return this.run !== null;
  }

  get wanted() {
    return this.playing || this.wish !== null;
  }

  // Where the listener is now: what the clock says, less the way to the ear.
  get position() {
    if (!this.playing) return this.rest;
    const late = this.context.outputLatency || 0;
    return this.run.positionAt(this.context.currentTime - late);
  }

  async play() {
    if (this.playing || this.clips.length === 0) return;
    const wish = Symbol("start");
    this.wish = wish;
    try {
      this.prepare();
      clearTimeout(this.sleep);
      this.tell("wish");
      await this.context.resume();
      if (this.wish !== wish) return;
      this.startRun(this.inside(this.rest));
      this.tell("start");
    } finally {
      if (this.wish === wish) this.wish = null;
    }
  }

  // Also takes back the wish to play, where the audio has not started yet.
  pause() {
    if (!this.wanted) return;
    this.account();
    this.wish = null;
    if (this.playing) {
      this.rest = this.position;
      this.run.finish(this.soon);
      this.run = null;
    }
    clearTimeout(this.sleep);
    this.sleep = setTimeout(() => this.context.suspend(), 2000);
    this.tell("stop");
  }

  // While a loop plays, what is outside of it can't be gone to: the loop begins anew.
  seek(position) {
    this.rest = clamp(position, 0, this.length);
    if (this.playing) {
      if (this.loop) this.rest = this.inside(this.rest);
      this.restartRun(() => this.rest);
    }
    this.tell("move");
  }

  // Where playing goes on from a position: outside the loop, or at its very end, from the loop's start.
  inside(position) {
    const [start, end] = this.loop ?? [0, this.length];
    return position >= start && position < end - SEAM_S ? position : start;
  }

  choose(index) {
    this.account();
    if (this.playing && index !== this.chosen) this.counted = this.soon + SWITCH_S + (this.discreet ? SILENT_S : 0);
    this.chosen = index;
    this.run?.choose(index, this.soon);
    this.tell("choose");
  }

  // Adds to the chosen clip's seconds what has reached the ear since the last time. `counted` may lie ahead of
  // the clock: until then the clip is not there yet. A clock that stands still adds nothing.
  account() {
    if (!this.playing) return;
    const now = this.context.currentTime - (this.context.outputLatency || 0);
    if (now <= this.counted) return;
    const before = this.listened[this.chosen];
    if (this.levelDb > LOWEST_DB) this.listened[this.chosen] += now - this.counted;
    this.counted = now;
    if (before < HEARD_S && this.heard(this.chosen)) this.tell("heard");
  }

  heard(index) {
    return this.listened[index] >= HEARD_S;
  }

  // A stretch [start, end] in seconds, or null. What plays inside the stretch plays on there.
  setLoop(loop) {
    this.loop = loop?.map((time) => this.onSample(time)) ?? null;
    if (this.playing) this.restartRun((position) => this.inside(position));
    this.tell("loop");
  }

  // Once there is sound, the level moves to where it is set within some tenths of a second, never at once.
  setLevel(levelDb) {
    this.account();
    this.levelDb = levelDb;
    if (this.context !== null) this.master.gain.setTargetAtTime(this.masterGain, this.context.currentTime, 0.1);
  }

  get masterGain() {
    return this.levelDb <= LOWEST_DB ? 0 : 10 ** (this.levelDb / 20);
  }

  // A context may be made only when the listener asks for sound; at the set's own rate nothing is resampled.
  prepare() {
    if (this.context !== null) return;
    try {
      this.context = new AudioContext({ sampleRate: this.sampleRate, latencyHint: "interactive" });
    } catch {
      this.context = new AudioContext();
    }
    this.master = this.context.createGain();
    this.master.gain.value = this.masterGain; // at once: every run rises from silence by itself
    this.master.connect(this.context.destination);
  }

  startRun(position, when = this.soon) {
    const start = this.onSample(position);
    const run = new Run(this.context, this.master, this.clips, this.chosen, this.discreet);
    run.addPass(when, start, Math.max((this.loop?.[1] ?? this.length) - start, 0));
    run.begin(when);
    this.account();
    this.run = run;
    this.counted = when;
    this.tend();
  }

  restartRun(positionAfter) {
    const when = this.soon;
    const old = this.run;
    this.startRun(positionAfter(old.positionAt(when)), when);
    old.finish(when);
  }

  // Keep a loop going, and notice the end.
  tend() {
    if (!this.playing) return;
    this.account();
    const now = this.context.currentTime;
    if (this.loop === null) {
      if (now >= this.run.end + SEAM_S) {
        this.pause();
        this.rest = 0;
        this.tell("end");
      }
      return;
    }
    const [start, end] = this.loop;
    while (this.run.end < now + PLANNED_S) this.run.addPass(this.run.end, start, end - start);
  }

  tell(what) {
    this.dispatchEvent(new CustomEvent("change", { detail: what }));
  }
}

// The clips embedded in the page, decoded one after the other. Their text is dropped as soon as it is read.
async function decodedClips(count, sampleRate, tell) {
  const decoder = offlineContext(sampleRate);
  const clips = [];
  for (let number = 1; number <= count; number++) {
    tell(number);
    const holder = byId(`audio-${number}`);
    const bytes = bytesOf(holder.textContent);
    holder.remove();
    clips.push(await decoder.decodeAudioData(bytes.buffer));
  }
  return clips;
}

// Where a browser does not know the set's rate, it resamples to one that all know.
function offlineContext(sampleRate) {
  try {
    return new OfflineAudioContext(1, 1, sampleRate);
  } catch {
    return new OfflineAudioContext(1, 1, 48000);
  }
}

function bytesOf(base64) {
  const characters = atob(base64);
  const bytes = new Uint8Array(characters.length);
  for (let index = 0; index < bytes.length; index++) bytes[index] = characters.charCodeAt(index);
  return bytes;
}
