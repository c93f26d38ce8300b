// The curves of the loop as ground, and over them what is played: the pass so far, and the place that is heard.

const LEFT = 48;
const RIGHT = 10;
const TOP = 8;
const LANE_GAP = 12;
const AXIS = 22;
const PITCH_PART = 0.72;
const SPANS = [["whole loop", 0], ["8 s", 8], ["3 s", 3], ["1 s", 1]];
const KEYS_SPAN_S = 6;
const MARGIN_OCTAVES = 1.5 / 12;
const AXIS_FONT = "11.5px system-ui, sans-serif";

// A canvas as sharp as the screen, as large as its box.
function fitted(canvas) {
  const { clientWidth: width, clientHeight: height } = canvas.parentElement;
  const dots = window.devicePixelRatio || 1;
  if (canvas.width !== Math.round(width * dots) || canvas.height !== Math.round(height * dots)) {
    [canvas.width, canvas.height] = [Math.round(width * dots), Math.round(height * dots)];
  }
  const pen = canvas.getContext("2d");
  pen.setTransform(dots, 0, 0, dots, 0, 0);
  pen.clearRect(0, 0, width, height);
  return { pen, width, height };
}

// The page's colours, read anew when light and dark change.
const paints = new Map();
function paint(name) {
  if (!paints.has(name)) paints.set(name, getComputedStyle(document.documentElement).getPropertyValue(`--${name}`).trim());
  return paints.get(name);
}

// The ink of a slot, by its number from 1 on.
function inkOf(slot) {
  return paint(`ink-${Math.max(slot - 1, 0) % INKS}`);
}

function strokeLine(pen, points, x, y) {
  pen.beginPath();
  points.forEach(([across, up], index) => (index === 0 ? pen.moveTo(x(across), y(up)) : pen.lineTo(x(across), y(up))));
  pen.stroke();
}

class Graph {
  constructor(box, model, trace) {
    this.box = box;
    this.model = model;
    this.trace = trace;
    this.span = 0;
    this.page = 0;
    this.view = { start: 0, end: 1, low: -1, high: 1 };
    this.stale = true;
    [this.ground, this.moving] = box.querySelectorAll("canvas");
    new ResizeObserver(() => this.redraw()).observe(box);
    matchMedia("(prefers-color-scheme: dark)").addEventListener("change", () => {
      paints.clear();
      this.redraw();
    });
  }

  redraw() {
    this.stale = true;
  }

  showSpan(seconds) {
    this.span = seconds;
    this.redraw();
  }

  get byKeys() {
    return this.trace.newest?.mode === "keys";
  }

  // Which stretch is in view, and which pitches.
  place(now) {
    const { curves, loop } = this.model;
    const span = this.byKeys ? KEYS_SPAN_S : this.span > 0 && this.span < loop ? this.span : loop;
    const page = this.byKeys ? 0 : Math.floor((now?.position ?? 0) / span + 1e-9);
    const start = page * span;
    const lines = !curves ? [] : span < loop && !this.byKeys
      ? [...stretchOf(curves.target, start, start + span), ...stretchOf(curves.pitch, start, start + span)] : [...curves.target, ...curves.pitch];
    let low = lines.reduce((least, [, value]) => Math.min(least, value), Infinity);
    let high = lines.reduce((most, [, value]) => Math.max(most, value), -Infinity);
    if (this.byKeys) [low, high] = this.playedRange(low, high);
    if (!Number.isFinite(low)) [low, high] = [-1, 1];
    const view = { start, end: start + span, low: low - MARGIN_OCTAVES, high: high + MARGIN_OCTAVES };
    if (Object.keys(view).some((name) => view[name] !== this.view[name])) this.stale = true;
    if (this.byKeys !== this.wasByKeys) this.stale = true;
    this.wasByKeys = this.byKeys;
    this.view = view;
  }

  // Keys may play anywhere: the lane grows to hold what they do, by whole octaves.
  playedRange(low, high) {
    const heard = this.trace.heard();
    const shift = this.model.shiftOf(this.trace.newest.slot);
    for (let row = this.trace.after(heard - KEYS_SPAN_S * this.trace.rate); row < this.trace.count; row++) {
      const target = this.trace.value("target", row) + shift;
      if (target < low) low = Math.floor(target);
      if (target > high) high = Math.ceil(target);
    }
    return [low, high];
  }

  draw(heard, now) {
    if (this.box.clientWidth === 0) return;
    this.place(now);
    if (this.stale) this.drawGround();
    this.drawMoving(heard, now);
  }

  measure(width, height) {
    const lanes = height - TOP - LANE_GAP - AXIS;
    this.right = width - RIGHT;
    this.pitchBottom = TOP + Math.round(PITCH_PART * lanes);
    this.gainTop = this.pitchBottom + LANE_GAP;
    this.gainBottom = height - AXIS;
    const { start, end, low, high } = this.view;
    this.x = (time) => LEFT + ((time - start) / (end - start)) * (this.right - LEFT);
    this.y = (octaves) => this.pitchBottom - ((octaves - low) / (high - low)) * (this.pitchBottom - TOP);
    this.yGain = (gain) => this.gainBottom - 3 - gain * (this.gainBottom - this.gainTop - 6);
  }

  // The ground

  drawGround() {
    this.stale = false;
    const { pen, width, height } = fitted(this.ground);
    this.measure(width, height);
    pen.font = AXIS_FONT;
    this.drawLanes(pen);
    this.drawTimes(pen, height);
    this.drawPitches(pen);
    const { curves } = this.model;
    if (!curves || this.byKeys) return;
    this.clipped(pen, TOP, this.pitchBottom, () => this.drawPitchCurves(pen, curves));
    this.clipped(pen, this.gainTop, this.gainBottom, () => this.drawGainCurves(pen, curves));
  }

  clipped(pen, top, bottom, draw) {
    pen.save();
    pen.beginPath();
    pen.rect(LEFT, top, this.right - LEFT, bottom - top);
    pen.clip();
    draw();
    pen.restore();
  }

  drawLanes(pen) {
    for (const [top, bottom] of [[TOP, this.pitchBottom], [this.gainTop, this.gainBottom]]) {
      pen.fillStyle = paint("plot");
      pen.strokeStyle = paint("rule");
      pen.fillRect(LEFT, top, this.right - LEFT, bottom - top);
      pen.strokeRect(LEFT + 0.5, top + 0.5, this.right - LEFT - 1, bottom - top - 1);
    }
    pen.fillStyle = paint("faint");
    pen.textAlign = "right";
    pen.fillText("1", LEFT - 6, this.yGain(1) + 8);
    pen.fillText("gain", LEFT - 6, (this.gainTop + this.gainBottom) / 2 + 4);
    pen.fillText("0", LEFT - 6, this.yGain(0));
  }

  drawTimes(pen, height) {
    const { start, end } = this.view;
    const step = roundStep((70 / (this.right - LEFT)) * (end - start));
    const digits = Math.max(0, -Math.floor(Math.log10(step) + 1e-9));
    pen.textAlign = "center";
    for (let count = Math.ceil(start / step - 1e-9); count * step <= end + 1e-9; count++) {
      const x = Math.round(this.x(count * step)) + 0.5;
      pen.strokeStyle = paint("grid");
      for (const [top, bottom] of [[TOP, this.pitchBottom], [this.gainTop, this.gainBottom]]) strokeLine(pen, [[x, top + 1], [x, bottom - 1]], (a) => a, (b) => b);
      const time = this.byKeys ? count * step - KEYS_SPAN_S : count * step;
      pen.fillStyle = paint("faint");
      if (x < this.right - 16) pen.fillText(`${fixed(time, digits)} s`, x, height - 6);
    }
  }

  drawPitches(pen) {
    const { low, high } = this.view;
    const pixels = (this.pitchBottom - TOP) / (12 * (high - low));
    const step = [0.1, 0.2, 0.5, 1, 3, 6, 12, 24].find((size) => size * pixels >= 15) ?? 24;
    pen.textAlign = "right";
    for (let count = Math.ceil((12 * low) / step); count * step <= 12 * high; count++) {
      const y = Math.round(this.y((count * step) / 12)) + 0.5;
      const isC = Math.abs(((count * step) / 12) % 1) < 1e-9;
      pen.strokeStyle = paint(isC ? "grid-strong" : "grid");
      strokeLine(pen, [[LEFT + 1, y], [this.right - 1, y]], (a) => a, (b) => b);
      pen.fillStyle = paint(isC ? "text" : "faint");
      const off = Math.round(100 * (count * step - Math.round(count * step)));
      const label = off === 0 ? noteText((count * step) / 12) : signed(off, 0);
      if (y > TOP + 5 && y < this.pitchBottom - 2) pen.fillText(label, LEFT - 6, y + 4);
    }
  }

  drawPitchCurves(pen, curves) {
    const half = this.model.tolerance / 1200;
    pen.fillStyle = pen.strokeStyle = paint("band");
    for (let index = 1; index < curves.target.length; index++) {
      const [[from, octaves], [to, next]] = [curves.target[index - 1], curves.target[index]];
      if (octaves !== next || to <= from) continue;
      const [left, top] = [this.x(from), this.y(octaves + half)];
      pen.fillRect(left, top - 0.5, this.x(to) - left, this.y(octaves - half) - top + 1);
    }
    pen.lineWidth = 1;
    pen.strokeStyle = paint("faint");
    strokeLine(pen, curves.target, this.x, this.y);
    pen.lineWidth = 1.5;
    pen.globalAlpha = 0.6;
    pen.strokeStyle = inkOf(this.model.current);
    strokeLine(pen, curves.pitch, this.x, this.y);
  }

  drawGainCurves(pen, curves) {
    pen.strokeStyle = paint("faint");
    pen.setLineDash([1, 3]);
    strokeLine(pen, curves.gate, this.x, this.yGain);
    pen.setLineDash([]);
    pen.globalAlpha = 0.6;
    pen.lineWidth = 1.5;
    pen.strokeStyle = inkOf(this.model.current);
    strokeLine(pen, curves.gain, this.x, this.yGain);
  }

  // What moves

  drawMoving(heard, now) {
    const { pen } = fitted(this.moving);
    if (!now) return;
    const rows = this.rowsInView(heard);
    const time = this.byKeys ? (row) => KEYS_SPAN_S + (this.trace.sampleAt(row) - heard) / this.trace.rate : (row) => this.trace.value("position", row);
    if (this.byKeys) this.clipped(pen, TOP, this.pitchBottom, () => this.drawKeyTargets(pen, rows, time));
    this.clipped(pen, TOP, this.pitchBottom, () => this.drawPlayed(pen, rows, time, "pitch", this.y));
    this.clipped(pen, this.gainTop, this.gainBottom, () => this.drawPlayed(pen, rows, time, "gain", this.yGain));
    this.drawPlace(pen, now);
  }

  // The pass that is being played, up to what is heard; by keys, the last seconds.
  rowsInView(heard) {
    const last = this.trace.after(heard);
    if (this.byKeys) return [this.trace.after(heard - KEYS_SPAN_S * this.trace.rate), last];
    let first = last;
    const { start } = this.view;
    while (first > this.trace.first) {
      const position = this.trace.value("position", first - 1);
      if (position < start || (first < last && position > this.trace.value("position", first))) break;
      first -= 1;
    }
    return [first, last];
  }

  drawPlayed(pen, [first, last], time, name, y) {
    pen.lineWidth = 3;
    pen.lineJoin = "round";
    let slot = -1;
    for (let row = first; row < last; row++) {
      const shift = name === "pitch" ? this.model.shiftOf(this.trace.value("slot", row)) : 0;
      const place = [this.x(time(row)), y(this.trace.value(name, row) + shift)];
      if (this.trace.value("slot", row) !== slot) {
        if (slot >= 0) pen.stroke();
        slot = this.trace.value("slot", row);
        pen.strokeStyle = inkOf(slot);
        pen.beginPath();
        pen.moveTo(...place);
      }
      pen.lineTo(...place);
    }
    if (slot >= 0) pen.stroke();
  }

  drawKeyTargets(pen, [first, last], time) {
    pen.lineWidth = 1;
    pen.strokeStyle = paint("faint");
    pen.beginPath();
    for (let row = first; row < last; row++) {
      const y = this.y(this.trace.value("target", row) + this.model.shiftOf(this.trace.value("slot", row)));
      if (row === first) pen.moveTo(this.x(time(row)), y);
      else {
        pen.lineTo(this.x(time(row)), this.y(this.trace.value("target", row - 1) + this.model.shiftOf(this.trace.value("slot", row - 1))));
        pen.lineTo(this.x(time(row)), y);
      }
    }
    pen.stroke();
  }

  drawPlace(pen, now) {
    const x = this.byKeys ? this.right - 1 : this.x(now.position);
    if (x < LEFT - 1 || x > this.right + 1) return;
    pen.fillStyle = pen.strokeStyle = paint("text");
    pen.lineWidth = 1.5;
    pen.beginPath();
    pen.moveTo(x - 5, 0);
    pen.lineTo(x + 5, 0);
    pen.lineTo(x, 8);
    pen.fill();
    strokeLine(pen, [[x, 0], [x, this.gainBottom]], (a) => a, (b) => b);
    this.drawDot(pen, x, this.y(now.pitch + this.model.shiftOf(now.slot)), inkOf(now.slot));
    this.drawDot(pen, x, this.yGain(now.gain), inkOf(now.slot));
  }

  drawDot(pen, x, y, ink) {
    pen.fillStyle = paint("plot");
    pen.strokeStyle = ink;
    pen.lineWidth = 3;
    pen.beginPath();
    pen.arc(x, y, 5, 0, 2 * Math.PI);
    pen.fill();
    pen.stroke();
  }
}
