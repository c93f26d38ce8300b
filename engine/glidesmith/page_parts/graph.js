// The curves over time: a ruler, pitch, gain. All that is drawn is drawn anew when the view changes.

const [LEFT, LEFT_WITH_CENTS] = [46, 68]; // room for the labels of pitches: "C#4", "C#4 +40"
const RIGHT = 12;
const RULER = 24;
const LANE_GAP = 12;
const AXIS = 22;
const DRAG_PIXELS = 4;
const BADGE_ROOM = 9; // pixels to the nearest other line
const SHORTEST_VIEW_S = 0.005;
const LEAST_OCTAVES = 0.02;

class Graph {
  constructor(box, data, sound, tell) {
    this.box = box;
    this.svg = box.querySelector("svg");
    this.layer = layerOver(box);
    this.data = data;
    this.sound = sound;
    this.tell = tell;
    this.length = Math.max(...data.candidates.map((candidate) => candidate.frames)) / data.sample_rate;
    this.pointers = new Map();
    this.pointedAt = null;
    this.showAll();
    new ResizeObserver(() => this.draw()).observe(box);
    this.listen();
  }

  // The view

  showAll() {
    const values = this.data.candidates.flatMap(({ curves }) => [...curves.target, ...curves.pitch]);
    const octaves = values.map(([, value]) => value);
    const low = octaves.reduce((least, value) => Math.min(least, value), Infinity);
    const high = octaves.reduce((most, value) => Math.max(most, value), -Infinity);
    this.whole = { start: 0, end: this.length, low: low - 1.5 / 12, high: high + 1.5 / 12 };
    this.view = { ...this.whole };
    this.changed();
  }

  showStretch(start, end) {
    const lines = this.data.candidates.flatMap(({ curves }) => [curves.target, curves.pitch]);
    const octaves = lines.flatMap((line) => stretchOf(line, start, end).map(([, value]) => value));
    const low = Math.min(...octaves) - 0.75 / 12;
    const high = Math.max(...octaves) + 0.75 / 12;
    this.view = { start, end, low, high };
    this.changed();
  }

  // Zoom by a factor over 1 to come closer, about a place that stays where it is.
  zoom(factor, about = (this.view.start + this.view.end) / 2) {
    const span = clamp((this.view.end - this.view.start) / factor, SHORTEST_VIEW_S, this.length);
    const part = (about - this.view.start) / (this.view.end - this.view.start);
    this.place(about - part * span, span);
    this.keepPitchInView();
  }

  zoomPitch(factor, about) {
    const { low, high } = this.view;
    const span = clamp((high - low) / factor, LEAST_OCTAVES, this.whole.high - this.whole.low);
    if (about === undefined) this.placePitch(this.chosenPitch() - span / 2, span);
    else this.placePitch(about - ((about - low) / (high - low)) * span, span);
  }

  // The chosen candidate's, where keys zoom about.
  chosenPitch() {
    return valueAt(this.data.candidates[this.sound.chosen].curves.pitch, this.centre());
  }

  keepPitchInView() {
    const { low, high } = this.view;
    const pitch = this.chosenPitch();
    if (pitch < low || pitch > high) this.placePitch(pitch - (high - low) / 2, high - low);
  }

  pan(seconds, octaves = 0) {
    const { start, end, low, high } = this.view;
    this.place(start + seconds, end - start);
    this.placePitch(low + octaves, high - low);
  }

  place(start, span) {
    this.view.start = clamp(start, 0, this.length - span);
    this.view.end = this.view.start + span;
    this.changed();
  }

  placePitch(low, span) {
    this.view.low = clamp(low, this.whole.low, Math.max(this.whole.high - span, this.whole.low));
    this.view.high = this.view.low + span;
    this.changed();
  }

  changed() {
    if (this.pending) return;
    this.pending = requestAnimationFrame(() => {
      this.pending = 0;
      this.draw();
      this.tell("view");
    });
  }

  // Follow what plays: turn the page when it leaves the view.
  follow(position) {
    const { start, end } = this.view;
    const span = end - start;
    const wasInside = this.lastPosition >= start && this.lastPosition <= end;
    this.lastPosition = position;
    if (wasInside && position > end && position < end + span && this.pointers.size === 0) this.place(end, span);
  }

  // Drawing

  measure() {
    this.width = Math.max(this.box.clientWidth, 240);
    this.height = this.box.clientHeight;
    const lanes = this.height - RULER - LANE_GAP - AXIS;
    this.pitchTop = RULER;
    this.pitchBottom = RULER + Math.round(0.72 * lanes);
    this.gainTop = this.pitchBottom + LANE_GAP;
    this.gainBottom = this.height - AXIS;
    const { start, end, low, high } = this.view;
    this.pitchStep = pitchStep((this.pitchBottom - this.pitchTop) / (12 * (high - low)) / 15);
    this.left = this.pitchStep < 1 ? LEFT_WITH_CENTS : LEFT;
    const across = (this.width - this.left - RIGHT) / (end - start);
    const up = (this.pitchBottom - this.pitchTop) / (high - low);
    this.x = (time) => this.left + (time - start) * across;
    this.y = (octaves) => this.pitchBottom - (octaves - low) * up;
    this.yGain = (gain) => this.gainBottom - 2 - gain * (this.gainBottom - this.gainTop - 4);
    this.timeAt = (x) => start + (x - this.left) / across;
    this.octavesAt = (y) => low + (this.pitchBottom - y) / up;
  }

  draw() {
    if (this.box.clientWidth === 0) return;
    this.measure();
    for (const svg of [this.svg, this.layer]) svg.setAttribute("viewBox", `0 0 ${this.width} ${this.height}`);
    this.loopMark = drawn("g", { class: "loop-mark" });
    this.playMark = drawn("path", { class: "play-mark" });
    this.pointMark = drawn("path", { class: "point-mark" });
    this.svg.replaceChildren(
      this.clips(), this.frame(), this.timeAxis(), this.pitchAxis(),
      this.pitchLane(), this.gainLane(),
    );
    this.layer.replaceChildren(this.loopMark, this.pointMark, this.playMark);
    this.drawLoop();
    this.drawPlay(this.sound.position);
  }

  clips() {
    const clip = (id, top, bottom) => {
      const area = { x: this.left, y: top, width: this.width - this.left - RIGHT, height: bottom - top };
      return drawn("clipPath", { id }, drawn("rect", area));
    };
    return drawn(
      "defs", {}, clip("pitch-lane", this.pitchTop, this.pitchBottom),
      clip("gain-lane", this.gainTop, this.gainBottom), clip("all-lanes", 0, this.gainBottom),
    );
  }

  frame() {
    const lane = (top, bottom, name) =>
      drawn("rect", { class: name, x: this.left, y: top, width: this.width - this.left - RIGHT, height: bottom - top });
    return drawn(
      "g", {}, lane(0, RULER - 4, "ruler"), lane(this.pitchTop, this.pitchBottom, "lane"),
      lane(this.gainTop, this.gainBottom, "lane"),
      drawn("text", { x: this.left - 6, y: RULER - 9, class: "axis end" }, "loop"),
      drawn("text", { x: this.left - 6, y: this.yGain(1) + 9, class: "axis end" }, "1"),
      drawn("text", { x: this.left - 6, y: this.yGain(0), class: "axis end" }, "0"),
      drawn("text", { x: this.left - 6, y: (this.gainTop + this.gainBottom) / 2 + 4, class: "axis end" }, "gain"),
    );
  }

  timeAxis() {
    const { start, end } = this.view;
    const step = roundStep((70 / (this.width - this.left - RIGHT)) * (end - start));
    const digits = Math.max(0, -Math.floor(Math.log10(step) + 1e-9));
    const group = drawn("g", {});
    for (let count = Math.ceil(start / step - 1e-9); count * step <= end + 1e-9; count++) {
      const x = this.x(count * step);
      const text = drawn("text", { x, y: this.height - 6, class: "axis middle" }, `${(count * step).toFixed(digits)} s`);
      const lines = `M${x} ${RULER - 9}V${RULER - 4}M${x} ${this.pitchTop}V${this.pitchBottom}M${x} ${this.gainTop}V${this.gainBottom}`;
      group.append(drawn("path", { d: lines, class: "grid" }));
      if (x < this.width - 24) group.append(text);
    }
    return group;
  }

  // Lines at notes; between them, at round cents, once there is room.
  pitchAxis() {
    const { low, high } = this.view;
    const step = this.pitchStep;
    const group = drawn("g", {});
    for (let count = Math.ceil((12 * low) / step); count * step <= 12 * high; count++) {
      const y = this.y((count * step) / 12);
      const isC = Math.abs(((count * step) / 12) % 1) < 1e-9;
      group.append(drawn("path", { d: `M${this.left} ${y}H${this.width - RIGHT}`, class: isC ? "grid strong" : "grid" }));
      if (y > this.pitchTop + 5 && y < this.pitchBottom - 2) {
        const label = noteText((count * step) / 12);
        group.append(drawn("text", { x: this.left - 6, y: y + 4, class: `axis end${isC ? " strong" : ""}` }, label));
      }
    }
    return group;
  }

  pitchLane() {
    const { start, end } = this.view;
    const chosen = this.data.candidates[this.sound.chosen].curves;
    const target = stretchOf(chosen.target, start, end);
    const group = drawn("g", { "clip-path": "url(#pitch-lane)" });
    group.append(drawn("path", { d: this.bandPath(target), class: "band" }));
    group.append(drawn("path", { d: pathOf(thinned(target, this.x), this.x, this.y), class: "target" }));
    this.appendLines(group, "pitch", this.y);
    this.appendBadges(group);
    return group;
  }

  bandPath(target) {
    const half = this.data.tolerance_cents / 1200;
    let text = "";
    for (let index = 1; index < target.length; index++) {
      const [[from, octaves], [to, next]] = [target[index - 1], target[index]];
      if (octaves !== next || to <= from) continue;
      const [top, bottom] = [this.y(octaves + half), this.y(octaves - half)];
      text += `M${this.x(from)} ${top}H${this.x(to)}V${bottom}H${this.x(from)}Z`;
    }
    return text;
  }

  // The chosen candidate's line comes last, so that it lies on top.
  appendLines(group, name, y) {
    const { start, end } = this.view;
    const order = this.data.candidates.map((_, index) => index).filter((index) => index !== this.sound.chosen);
    for (const index of [...order, this.sound.chosen]) {
      const points = stretchOf(this.data.candidates[index].curves[name], start, end);
      const kind = index === this.sound.chosen ? "line chosen" : "line";
      group.append(styled(drawn("path", { d: pathOf(thinned(points, this.x), this.x, y), class: kind }), index));
    }
  }

  // Each line bears its number where it is farthest from all others, and clear of the numbers that are there.
  appendBadges(group) {
    const { start, end } = this.view;
    const times = Array.from({ length: 117 }, (_, step) => start + ((end - start) * (step + 2)) / 120);
    const heights = this.data.candidates.map(({ curves }) => times.map((time) => this.y(valueAt(curves.pitch, time))));
    const placed = [];
    heights.forEach((own, index) => {
      const others = heights.filter((_, other) => other !== index);
      let [best, at] = [BADGE_ROOM, null];
      own.forEach((y, place) => {
        const inside = y > this.pitchTop + 9 && y < this.pitchBottom - 9;
        const apart = others.reduce((least, other) => Math.min(least, Math.abs(other[place] - y)), Infinity);
        const x = this.x(times[place]);
        if (inside && apart > best && placed.every((spot) => Math.hypot(spot.x - x, spot.y - y) > 18)) [best, at] = [apart, { x, y }];
      });
      if (at === null) return;
      placed.push(at);
      const circle = drawn("circle", { cx: at.x, cy: at.y, r: 7.5, class: "badge" });
      circle.style.stroke = lineStyle(index).ink;
      group.append(circle, drawn("text", { x: at.x, y: at.y + 4, class: "badge-text" }, String(index + 1)));
    });
  }

  gainLane() {
    const { start, end } = this.view;
    const chosen = this.data.candidates[this.sound.chosen].curves;
    const group = drawn("g", { "clip-path": "url(#gain-lane)" });
    for (const name of ["gate", "control"]) {
      const points = stretchOf(chosen[name], start, end);
      group.append(drawn("path", { d: pathOf(thinned(points, this.x), this.x, this.yGain), class: name }));
    }
    this.appendLines(group, "gain", this.yGain);
    return group;
  }

  drawLoop() {
    this.loopMark.replaceChildren();
    const loop = this.dragged ?? this.sound.loop;
    if (!loop) return;
    const [left, right] = loop.map((time) => clamp(this.x(time), this.left, this.width - RIGHT));
    if (right <= left) return;
    const band = { x: left, width: right - left };
    this.loopMark.append(
      drawn("rect", { ...band, y: 0, height: RULER - 4, class: "loop-bar" }),
      drawn("rect", { ...band, y: this.pitchTop, height: this.gainBottom - this.pitchTop, class: "loop-band" }),
    );
  }

  drawPlay(position) {
    const x = this.x(position);
    const inside = x >= this.left - 0.5 && x <= this.width - RIGHT + 0.5;
    const head = `M${x - 5} 0H${x + 5}L${x} 8Z`;
    this.playMark.setAttribute("d", inside ? `${head}M${x} 0V${this.gainBottom}` : "");
  }

  drawPointer() {
    const inside = this.pointedAt !== null;
    this.pointMark.setAttribute("d", inside ? `M${this.x(this.pointedAt)} ${RULER}V${this.gainBottom}` : "");
  }

  // Pointers, wheel and keys

  listen() {
    this.box.addEventListener("pointerdown", (event) => this.press(event));
    this.box.addEventListener("pointermove", (event) => this.move(event));
    for (const name of ["pointerup", "pointercancel"]) this.box.addEventListener(name, (event) => this.release(event));
    this.box.addEventListener("pointerleave", () => this.point(null));
    this.box.addEventListener("wheel", (event) => this.turn(event), { passive: false });
    this.box.addEventListener("keydown", (event) => this.key(event));
  }

  placeOf(event) {
    const box = this.box.getBoundingClientRect();
    return { x: event.clientX - box.left, y: event.clientY - box.top };
  }

  press(event) {
    if (event.button !== 0) return;
    this.box.focus({ preventScroll: true });
    this.box.setPointerCapture(event.pointerId);
    const place = this.placeOf(event);
    this.pointers.set(event.pointerId, place);
    this.began = { ...place, view: { ...this.view }, time: this.timeAt(place.x), ruler: place.y < RULER, moved: false };
  }

  move(event) {
    const place = this.placeOf(event);
    if (!this.pointers.has(event.pointerId)) {
      this.point(place.x >= this.left && place.x <= this.width - RIGHT ? this.timeAt(place.x) : null);
      return;
    }
    const before = this.pointers.get(event.pointerId);
    this.pointers.set(event.pointerId, place);
    if (this.pointers.size === 2) this.pinch(event.pointerId, before, place);
    else if (Math.hypot(place.x - this.began.x, place.y - this.began.y) > DRAG_PIXELS || this.began.moved) {
      this.began.moved = true;
      if (this.began.ruler) this.dragLoop(place);
      else this.pan(this.timeAt(before.x) - this.timeAt(place.x), this.octavesAt(before.y) - this.octavesAt(place.y));
    }
  }

  pinch(moving, before, after) {
    this.began.moved = true;
    const other = [...this.pointers].find(([id]) => id !== moving)[1];
    const distance = (place) => Math.max(Math.abs(place.x - other.x), 8);
    this.zoom(distance(after) / distance(before), this.timeAt((after.x + other.x) / 2));
  }

  dragLoop(place) {
    const time = clamp(this.timeAt(place.x), 0, this.length);
    const begun = clamp(this.began.time, 0, this.length);
    this.dragged = [Math.min(begun, time), Math.max(begun, time)];
    this.drawLoop();
  }

  release(event) {
    if (!this.pointers.delete(event.pointerId) || this.pointers.size > 0) return;
    const loop = this.dragged;
    this.dragged = null;
    if (loop) this.tell("loop", loop);
    else if (!this.began.moved && event.type === "pointerup") this.sound.seek(clamp(this.began.time, 0, this.length));
    this.drawLoop();
  }

  point(time) {
    this.pointedAt = time;
    this.drawPointer();
    this.tell("point");
  }

  // A wheel that turns over the page scrolls it; over the curves it zooms once they have been chosen.
  turn(event) {
    if (document.activeElement !== this.box && !event.ctrlKey && !event.metaKey) return;
    event.preventDefault();
    const place = this.placeOf(event);
    const factor = Math.exp(-clamp(event.deltaY || event.deltaX, -120, 120) * (event.ctrlKey ? 0.01 : 0.002));
    if (event.shiftKey) this.zoomPitch(factor, this.octavesAt(place.y));
    else if (Math.abs(event.deltaX) > Math.abs(event.deltaY)) this.pan(this.timeAt(event.deltaX) - this.timeAt(0));
    else this.zoom(factor, this.timeAt(place.x));
  }

  key(event) {
    if (event.ctrlKey || event.altKey || event.metaKey) return;
    const { start, end, low, high } = this.view;
    const [step, rise] = [(end - start) / 8, (high - low) / 8];
    const zoom = (factor) => (event.shiftKey ? this.zoomPitch(factor) : this.zoom(factor, this.centre()));
    const doing = {
      ArrowLeft: () => this.pan(-step), ArrowRight: () => this.pan(step),
      ArrowUp: () => this.pan(0, rise), ArrowDown: () => this.pan(0, -rise),
      Home: () => this.place(0, end - start), End: () => this.place(this.length, end - start),
      "+": () => zoom(1.5), "=": () => zoom(1.5), "*": () => zoom(1.5), "-": () => zoom(1 / 1.5), _: () => zoom(1 / 1.5),
      0: () => this.showAll(),
    }[event.key];
    if (!doing || (event.shiftKey && event.key.startsWith("Arrow"))) return;
    doing();
    event.preventDefault();
    event.stopPropagation();
  }

  // What keys zoom about: the play position where it is in view.
  centre() {
    const { start, end } = this.view;
    const position = this.sound.position;
    return position > start && position < end ? position : (start + end) / 2;
  }
}

// How many semitones lie between two labels, where there is room for so many labels per semitone.
function pitchStep(labels) {
  return [0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 3, 6, 12, 24].find((size) => size * labels >= 1) ?? 24;
}
