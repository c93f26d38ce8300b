// A small picture of each law, drawn from its closed form: a volt up, then down again.

const LAW_WIDTH = 62;
const LAW_HEIGHT = 34;
const LAW_POINTS = 40;
const LAW_SPAN = 1.35; // times as long as the way takes, for each direction

// How long a volt up from 0 takes, in units of T; where there is no end, until there is no more to see.
const LAW_DURATIONS = {
  linear: () => 1,
  rc: () => 4,
  log: ({ bend }) => Math.expm1(bend) / bend,
  exp: ({ bend }) => -Math.expm1(-bend) / bend,
  soft: ({ knee }) => 1 + 3 * knee,
  curve: () => 1,
  cosine: () => 1,
};

// Where a glide from y0 to x stands after t, in units of T, under each law; from its closed form.
const LAW_FORMULAS = {
  linear: (x, y0, t) => toward(y0, x, t),
  rc: (x, y0, t) => x + (y0 - x) * Math.exp(-t),
  log: (x, y0, t, { bend }) => {
    const b = bend;
    const inside = Math.exp(b * y0) + Math.sign(x - y0) * b * t;
    return inside <= 0 ? x : short(y0, x, Math.log(inside) / b);
  },
  exp: (x, y0, t, { bend }) => {
    const b = bend;
    const inside = Math.exp(-b * y0) - Math.sign(x - y0) * b * t;
    return inside <= 0 ? x : short(y0, x, -Math.log(inside) / b);
  },
  soft: (x, y0, t, { knee }) => {
    const c = knee;
    const away = (x - y0) / c;
    if (Math.abs(away) > 300) return toward(y0, x, t);
    return x - c * Math.asinh(Math.sinh(away) * Math.exp(-t / c));
  },
  curve: (x, y0, t, { curvature }) => {
    const p = Math.min(t, 1);
    const k = curvature;
    return y0 + (x - y0) * (Math.abs(k) < 1e-6 ? p : Math.expm1(-k * p) / Math.expm1(-k));
  },
  cosine: (x, y0, t) => y0 + ((x - y0) * (1 - Math.cos(Math.PI * Math.min(t, 1)))) / 2,
};

function toward(from, to, by) {
  return Math.abs(to - from) <= by ? to : from + Math.sign(to - from) * by;
}

// What has passed its target has arrived.
function short(from, to, value) {
  return (to - from) * (value - to) >= 0 ? to : value;
}

// The path of a law's picture, with the constants of a slot.
function lawPath(law, constants) {
  const points = [];
  const unit = LAW_DURATIONS[law](constants);
  const x = (time) => 2 + (time / (2 * LAW_SPAN)) * (LAW_WIDTH - 4);
  const y = (volts) => LAW_HEIGHT - 4 - volts * (LAW_HEIGHT - 8);
  for (const [index, [from, to]] of [[0, 1], [1, 0]].entries()) {
    const start = index === 0 ? 0 : points.at(-1)[1];
    for (let step = 0; step <= LAW_POINTS; step++) {
      const time = (step / LAW_POINTS) * LAW_SPAN;
      const origin = index === 0 ? from : start;
      points.push([index * LAW_SPAN + time, step === 0 ? origin : LAW_FORMULAS[law](to, origin, time * unit, constants)]);
    }
  }
  return pathOf(points, x, y);
}

function lawPicture() {
  const box = { class: "law-picture", viewBox: `0 0 ${LAW_WIDTH} ${LAW_HEIGHT}`, width: LAW_WIDTH, height: LAW_HEIGHT, "aria-hidden": "true", focusable: "false" };
  const target = pathOf([[0, 0], [0, 1], [LAW_SPAN, 1], [LAW_SPAN, 0], [2 * LAW_SPAN, 0]],
    (time) => 2 + (time / (2 * LAW_SPAN)) * (LAW_WIDTH - 4), (volts) => LAW_HEIGHT - 4 - volts * (LAW_HEIGHT - 8));
  return drawn("svg", box, drawn("path", { class: "target", d: target }), drawn("path", { class: "law-line" }));
}
