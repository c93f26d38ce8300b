// Numbers as people read them, and elements. Every text goes in as text, never as markup.

const MINUS = "\u2212";
const NOTE_NAMES = ["C", "C#", "D", "D#", "E", "F", "F#", "G", "G#", "A", "A#", "B"];
const MIDDLE_C = 60;

function element(name, attributes = {}, ...children) {
  return furnished(document.createElement(name), attributes, children);
}

// The namespace is taken from the page, which has a drawing already.
function drawn(name, attributes = {}, ...children) {
  const namespace = document.querySelector("svg").namespaceURI;
  return furnished(document.createElementNS(namespace, name), attributes, children);
}

function furnished(made, attributes, children) {
  for (const [key, value] of Object.entries(attributes)) {
    if (value === false || value === null || value === undefined) continue;
    if (typeof value === "function") made.addEventListener(key, value);
    else made.setAttribute(key, value === true ? "" : value);
  }
  made.append(...children);
  return made;
}

function byId(id) {
  return document.getElementById(id);
}

// Names come from files: their writing direction must not spill over into what stands around them.
function named(text) {
  return element("bdi", {}, text);
}

function signed(value, digits = 1) {
  const text = fixed(value, digits);
  return Number(value.toFixed(digits)) > 0 ? `+${text}` : text;
}

function fixed(value, digits = 1) {
  const text = value.toFixed(digits);
  return (Number(text) === 0 ? text.replace("-", "") : text).replace("-", MINUS);
}

function decibels(value, digits = 1) {
  return value <= -200 ? "silent" : `${fixed(value, digits)} dB`;
}

// Three digits that count: 296 ms, 1.24 s, 45 µs.
function duration(seconds) {
  if (seconds === 0) return "0 s";
  const [scale, unit] = seconds >= 0.9995 ? [1, "s"] : seconds >= 0.9995e-3 ? [1e3, "ms"] : [1e6, "µs"];
  return `${Number((seconds * scale).toPrecision(3))} ${unit}`;
}

function clock(seconds) {
  return `${seconds.toFixed(3)}\u00a0s`;
}

function cents(value) {
  return value >= 10 ? `${value.toFixed(0)} cents` : `${value.toFixed(1)} cents`;
}

// Rounded down, so that 100 % is said only where it is so.
function share(fraction) {
  return `${Math.floor(100 * fraction + 1e-9)} %`;
}

function counted(count, noun) {
  return `${count} ${noun}${count === 1 ? "" : "s"}`;
}

// A pitch in octaves from C4 as a note and the cents beside it: "A3 +12".
function noteText(octaves, withCents = true) {
  const semitones = MIDDLE_C + 12 * octaves;
  const nearest = Math.round(semitones);
  const off = Math.round(100 * (semitones - nearest));
  const name = `${NOTE_NAMES[((nearest % 12) + 12) % 12]}${Math.floor(nearest / 12) - 1}`;
  return withCents && off !== 0 ? `${name} ${signed(off, 0)}` : name;
}

function clamp(value, low, high) {
  return Math.min(Math.max(value, low), high);
}
