// Control in against control out, without time: where the line stands on the diagonal, the slew has arrived.

const SIDE_MARGIN = 40;
const FOOT_MARGIN = 24;
const TWIN_GAP = 4;

class Transfer {
  // `pair` names the two curves; pitch is in octaves, the rest from 0 to 1.
  constructor(box, data, graph, pair) {
    this.svg = box.querySelector("svg");
    this.layer = layerOver(box);
    this.box = box;
    this.data = data;
    this.graph = graph;
    [this.input, this.output] = pair;
    this.isPitch = this.output === "pitch";
    new ResizeObserver(() => this.draw()).observe(box);
  }

  draw() {
    if (this.box.clientWidth === 0) return;
    const { start, end, low, high } = this.graph.view;
    const [least, most] = this.isPitch ? [low, high] : [-0.03, 1.03];
    const [width, height] = [this.box.clientWidth, this.box.clientHeight];
    this.stepUp = this.stepOf((most - least) / ((height - FOOT_MARGIN) / 20));
    const hasCents = this.isPitch && this.stepUp < 0.99 / 12;
    this.left = hasCents ? LEFT_WITH_CENTS : SIDE_MARGIN;
    this.stepAcross = this.stepOf((most - least) / ((width - this.left) / (hasCents ? 72 : 48)));
    this.x = (value) => this.left + ((value - least) / (most - least)) * (width - this.left - 8);
    this.y = (value) => height - FOOT_MARGIN - ((value - least) / (most - least)) * (height - FOOT_MARGIN - 8);
    for (const svg of [this.svg, this.layer]) svg.setAttribute("viewBox", `0 0 ${width} ${height}`);
    this.dot = drawn("circle", { r: 5, class: "dot" });
    const id = `lane-of-${this.output}`;
    const lane = { x: this.left, y: 8, width: width - this.left - 8, height: height - FOOT_MARGIN - 8 };
    const lines = drawn("g", { "clip-path": `url(#${id})` }, this.diagonal(least, most), this.band(least, most));
    const chosen = this.graph.sound.chosen;
    const others = this.data.candidates.map((_, index) => index).filter((index) => index !== chosen);
    for (const index of [...others, chosen]) lines.append(this.line(index, start, end));
    this.layer.replaceChildren(drawn("g", { "clip-path": `url(#${id})` }, this.dot));
    this.svg.replaceChildren(
      drawn("defs", {}, drawn("clipPath", { id }, drawn("rect", lane))),
      drawn("rect", { ...lane, class: "lane" }), this.axes(least, most, width, height), lines,
    );
    this.drawDot(this.graph.sound.position);
  }

  diagonal(least, most) {
    return drawn("path", { d: pathOf([[least, least], [most, most]], this.x, this.y), class: "target" });
  }

  band(least, most) {
    const half = this.isPitch ? this.data.tolerance_cents / 1200 : 0;
    const corners = [[least, least - half], [most, most - half], [most, most + half], [least, least + half]];
    return drawn("path", { d: `${pathOf(corners, this.x, this.y)}Z`, class: "band" });
  }

  // Where the input jumps the pen is lifted: what is drawn is how the output moves.
  line(index, start, end) {
    const shift = this.shift(index);
    let text = "";
    let last = null;
    for (const [time, input, output] of this.points(index, start, end)) {
      const jumps = last === null || (time === last.time && input !== last.input);
      text += `${jumps ? "M" : "L"}${(this.x(input) + shift).toFixed(1)} ${this.y(output).toFixed(1)}`;
      last = { time, input };
    }
    const kind = index === this.graph.sound.chosen ? "line chosen" : "line";
    return styled(drawn("path", { d: text, class: kind }), index);
  }

  // On a note the target stands still and lines would cover each other: each gets its own few pixels.
  shift(index) {
    return this.isPitch ? TWIN_GAP * (index - (this.data.candidates.length - 1) / 2) : 0;
  }

  // (time, input, output): both curves have points of their own; at a jump of the input the output stays.
  points(index, start, end) {
    const { curves } = this.data.candidates[index];
    const [input, output] = [curves[this.input], curves[this.output]];
    const jumps = stretchOf(input, start, end).map(([time, value]) => [time, value, valueAt(output, time)]);
    const moves = stretchOf(output, start, end).map(([time, value]) => [time, valueAt(input, time), value]);
    const merged = [...jumps, ...moves].map((point, order) => ({ point, order }));
    merged.sort((one, other) => one.point[0] - other.point[0] || one.order - other.order);
    return merged.map(({ point }) => point);
  }

  axes(least, most, width, height) {
    const group = drawn("g", {});
    for (const value of ticks(least, most, this.stepUp)) {
      const y = this.y(value);
      group.append(drawn("path", { d: `M${this.left} ${y}H${width - 8}`, class: "grid" }));
      group.append(drawn("text", { x: this.left - 6, y: y + 4, class: "axis end" }, this.label(value)));
    }
    for (const value of ticks(least, most, this.stepAcross)) {
      const x = this.x(value);
      group.append(drawn("path", { d: `M${x} 8V${height - FOOT_MARGIN}`, class: "grid" }));
      group.append(drawn("text", { x, y: height - 8, class: "axis middle" }, this.label(value)));
    }
    return group;
  }

  // The step between labels, where it must be at least so much.
  stepOf(room) {
    const unit = this.isPitch ? 1 / 12 : 0.25;
    return unit * (this.isPitch ? pitchStep(unit / room) : room <= unit ? 1 : 2);
  }

  label(value) {
    return this.isPitch ? noteText(value) : String(value);
  }

  drawDot(position) {
    const index = this.graph.sound.chosen;
    const { curves } = this.data.candidates[index];
    const input = valueAt(curves[this.input], position);
    this.dot.setAttribute("cx", this.x(input) + this.shift(index));
    this.dot.setAttribute("cy", this.y(valueAt(curves[this.output], position)));
    this.dot.style.stroke = lineStyle(index).ink;
  }
}

function ticks(least, most, step) {
  const first = Math.ceil(least / step);
  return Array.from({ length: Math.floor(most / step) - first + 1 }, (_, count) => (first + count) * step);
}
