// Values as sliders place them and as people write them.

const STEPS = 2000; // of a slider
const FINE = 1;
const ARROW = 8;
const PAGE = 80;
const TIME_FLOOR_S = 0.0005; // where a slider for times begins, next to 0; shorter ones can be typed
const LOGARITHMIC = /^(bend|knee|rate_hz)$/;
const TYPED = /^\s*([+\-\u2212]?\d*[.,]?\d+(?:e[+-]?\d+)?|[+\-\u2212]?\d+[.,]?)\s*([^\s\d]*)\s*$/i;

// Between a value and a place from 0 to STEPS. Logarithmic ones with `orZero` have 0 at the very start.
class Scale {
  constructor({ low, high, logarithmic = false, orZero = false, whole = false }) {
    Object.assign(this, { low, high, logarithmic, orZero, whole });
  }

  get first() {
    return this.logarithmic && this.orZero ? 20 : 0;
  }

  place(value) {
    if (!this.logarithmic) return (STEPS * (value - this.low)) / (this.high - this.low);
    if (value <= 0) return 0;
    const part = Math.log(value / this.low) / Math.log(this.high / this.low);
    return clamp(this.first + part * (STEPS - this.first), this.first, STEPS);
  }

  value(place) {
    if (!this.logarithmic) return this.tidy(this.low + (clamp(place, 0, STEPS) / STEPS) * (this.high - this.low));
    if (this.orZero && place < this.first) return 0;
    const part = (clamp(place, this.first, STEPS) - this.first) / (STEPS - this.first);
    return this.tidy(this.low * (this.high / this.low) ** part);
  }

  // Three digits where the scale is logarithmic, hundredths of its larger unit where it is straight.
  tidy(value) {
    if (this.whole) return Math.round(value);
    if (this.logarithmic) return Number(value.toPrecision(3));
    const digits = this.high - this.low > 20 ? 1 : this.high - this.low > 2 ? 2 : 3;
    return Number(value.toFixed(digits));
  }

  // So many places on, and always to another value while there is one.
  moved(value, places) {
    if (this.whole) return clamp(value + Math.sign(places) * Math.max(1, Math.round((Math.abs(places) / STEPS) * (this.high - this.low))), this.low, this.high);
    if (this.logarithmic && this.orZero && value <= 0) return places > 0 ? this.low : 0;
    const from = this.place(value);
    if (this.logarithmic && this.orZero && places < 0 && from <= this.first) return 0;
    let to = from;
    for (let tries = 0; tries < 40; tries++) {
      to = clamp(to + places, this.first, STEPS);
      const found = this.value(to);
      if (found !== this.tidy(value) || to === this.first || to === STEPS) return found;
    }
    return value;
  }
}

function scaleOf(key) {
  if (key.kind === "time") return new Scale({ low: TIME_FLOOR_S, high: key.highest, logarithmic: true, orZero: true });
  const leaf = key.name.split(".").at(-1);
  return new Scale({
    low: key.lowest, high: key.highest, logarithmic: LOGARITHMIC.test(leaf), orZero: key.or_zero, whole: key.kind === "whole",
  });
}

// How many places a key moves a setting, or null.
function placesOf(event) {
  if (event.ctrlKey || event.altKey || event.metaKey) return null;
  const up = { ArrowUp: 1, ArrowRight: 1, ArrowDown: -1, ArrowLeft: -1 }[event.key];
  if (up) return up * (event.shiftKey ? FINE : ARROW);
  return { PageUp: PAGE, PageDown: -PAGE, Home: -STEPS, End: STEPS }[event.key] ?? null;
}

function timeText(seconds) {
  if (seconds === 0) return "0 ms";
  const [scale, unit] = seconds >= 1 ? [1, "s"] : seconds >= 1e-3 ? [1e3, "ms"] : [1e6, "µs"];
  return `${Number((seconds * scale).toPrecision(6))} ${unit}`;
}

function valueText(key, value) {
  if (value === null || value === undefined) return "";
  if (key.kind === "time") return timeText(value);
  if (typeof value === "number") {
    const text = String(Number(value.toPrecision(6))).replace("-", MINUS);
    return key.unit ? `${text} ${key.unit}` : text;
  }
  return String(value);
}

// What was typed, as the engine reads it: a time without its unit has the one that stood there before.
function typedValue(key, text, before) {
  const found = TYPED.exec(text);
  if (key.kind === "note" || key.kind === "text" || key.kind === "file" || !found) return text;
  const number = found[1].replace(",", ".").replace(MINUS, "-");
  if (key.kind === "time") return `${number} ${found[2] || before.split(" ")[1] || "ms"}`;
  return found[2] ? `${number} ${found[2]}` : number;
}

// A key's value where it is left out, as it would be reset to; undefined where the key must be given.
function defaultOf(key) {
  return key.required ? undefined : key.default;
}

function leafOf(name) {
  return name.slice(name.indexOf(".") + 1);
}

// "scale_error_cents_per_octave" as people read it: the unit stands beside the value.
function spoken(leaf) {
  return leaf.replace(/_(db|hz|volts)$/, "").replace("_cents_per_octave", "").replaceAll("_", " ");
}
