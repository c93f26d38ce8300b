// Control in against control out, without time: where the dot stands on the diagonal, the slew has arrived.

const SIDE_MARGIN = 42;
const FOOT_MARGIN = 22;
const TAIL_S = 0.6;

class Transfer {
  // `input` and `output` name two curves and two columns of the trace.
  constructor(box, model, trace, [input, output]) {
    this.box = box;
    this.canvas = box.querySelector("canvas");
    this.model = model;
    this.trace = trace;
    [this.input, this.output] = [input, output];
    this.isPitch = output === "pitch";
  }

  range() {
    if (!this.isPitch) return [-0.03, 1.03];
    const { curves } = this.model;
    const values = curves ? [...curves.target, ...curves.pitch].map(([, value]) => value) : [-1, 1];
    const low = values.reduce((least, value) => Math.min(least, value), Infinity);
    const high = values.reduce((most, value) => Math.max(most, value), -Infinity);
    return [low - MARGIN_OCTAVES, high + MARGIN_OCTAVES];
  }

  draw(heard, now) {
    if (this.box.clientWidth === 0) return;
    const { pen, width, height } = fitted(this.canvas);
    const [least, most] = this.range();
    const [right, bottom] = [width - 8, height - FOOT_MARGIN];
    this.x = (value) => SIDE_MARGIN + ((value - least) / (most - least)) * (right - SIDE_MARGIN);
    this.y = (value) => bottom - ((value - least) / (most - least)) * (bottom - 8);
    pen.font = AXIS_FONT;
    pen.fillStyle = paint("plot");
    pen.strokeStyle = paint("rule");
    pen.fillRect(SIDE_MARGIN, 8, right - SIDE_MARGIN, bottom - 8);
    pen.strokeRect(SIDE_MARGIN + 0.5, 8.5, right - SIDE_MARGIN - 1, bottom - 9);
    this.axes(pen, least, most, right, bottom, height);
    pen.save();
    pen.beginPath();
    pen.rect(SIDE_MARGIN, 8, right - SIDE_MARGIN, bottom - 8);
    pen.clip();
    this.diagonal(pen, least, most);
    this.curve(pen);
    this.tail(pen, heard, now);
    pen.restore();
  }

  axes(pen, least, most, right, bottom, height) {
    pen.strokeStyle = paint("grid");
    pen.fillStyle = paint("faint");
    pen.textAlign = "right";
    for (const value of this.ticks(least, most, bottom / 20)) {
      strokeLine(pen, [[SIDE_MARGIN + 1, this.y(value)], [right - 1, this.y(value)]], (a) => a, (b) => b);
      pen.fillText(this.label(value), SIDE_MARGIN - 6, this.y(value) + 4);
    }
    pen.textAlign = "center";
    for (const value of this.ticks(least, most, (right - SIDE_MARGIN) / 48)) {
      strokeLine(pen, [[this.x(value), 9], [this.x(value), bottom - 1]], (a) => a, (b) => b);
      pen.fillText(this.label(value), this.x(value), height - 6);
    }
  }

  ticks(least, most, room) {
    const unit = this.isPitch ? 1 / 12 : 0.25;
    const steps = this.isPitch ? [0.5, 1, 3, 6, 12, 24] : [1, 2];
    const step = unit * (steps.find((size) => (most - least) / (size * unit) <= room) ?? steps.at(-1));
    const first = Math.ceil(least / step);
    return Array.from({ length: Math.floor(most / step) - first + 1 }, (_, count) => (first + count) * step);
  }

  label(value) {
    return this.isPitch ? noteText(value) : String(value);
  }

  diagonal(pen, least, most) {
    const half = this.isPitch ? this.model.tolerance / 1200 : 0;
    pen.strokeStyle = paint("band");
    pen.lineWidth = Math.max(2, Math.abs(this.y(half) - this.y(-half)));
    strokeLine(pen, [[least, least], [most, most]], this.x, this.y);
    pen.strokeStyle = paint("faint");
    pen.lineWidth = 1;
    strokeLine(pen, [[least, least], [most, most]], this.x, this.y);
  }

  // The whole loop's way. Where the input jumps the pen is lifted: what is drawn is how the output moves.
  curve(pen) {
    const { curves } = this.model;
    if (!curves) return;
    if (this.model.curves !== this.known) {
      this.known = this.model.curves;
      this.points = this.merged(curves[this.input], curves[this.output]);
    }
    pen.strokeStyle = inkOf(this.model.current);
    pen.globalAlpha = 0.6;
    pen.lineWidth = 1.3;
    pen.beginPath();
    let last = null;
    for (const [time, input, output] of this.points) {
      if (last === null || (time === last.time && input !== last.input)) pen.moveTo(this.x(input), this.y(output));
      else pen.lineTo(this.x(input), this.y(output));
      last = { time, input };
    }
    pen.stroke();
    pen.globalAlpha = 1;
  }

  // (time, input, output): both curves have points of their own; at a jump of the input the output stays.
  merged(input, output) {
    const jumps = input.map(([time, value]) => [time, value, valueAt(output, time)]);
    const moves = output.map(([time, value]) => [time, valueAt(input, time), value]);
    const points = [...jumps, ...moves].map((point, order) => ({ point, order }));
    points.sort((one, other) => one.point[0] - other.point[0] || one.order - other.order);
    return points.map(({ point }) => point);
  }

  tail(pen, heard, now) {
    if (!now) return;
    const place = (row) => {
      const shift = this.isPitch ? this.model.shiftOf(this.trace.value("slot", row)) : 0;
      return [this.x(this.trace.value(this.input, row) + shift), this.y(this.trace.value(this.output, row) + shift)];
    };
    pen.strokeStyle = inkOf(now.slot);
    pen.lineWidth = 3;
    pen.lineJoin = "round";
    pen.beginPath();
    let before = null;
    const end = this.trace.after(heard);
    for (let row = this.trace.after(heard - TAIL_S * this.trace.rate); row < end; row++) {
      const [x, y] = place(row);
      if (before === null || Math.abs(before - x) > 0.5) pen.moveTo(x, y);
      else pen.lineTo(x, y);
      before = x;
    }
    pen.stroke();
    const shift = this.isPitch ? this.model.shiftOf(now.slot) : 0;
    pen.fillStyle = paint("plot");
    pen.beginPath();
    pen.arc(this.x(now[this.input] + shift), this.y(now[this.output] + shift), 5, 0, 2 * Math.PI);
    pen.fill();
    pen.stroke();
  }
}
