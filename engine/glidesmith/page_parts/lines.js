// Lines of points (seconds, value), and how each candidate's line looks.

const DASHES = ["", "9 4", "2 3", "12 3 2 3", "6 2 2 2 2 2", "16 4", "1 5"];
const INKS = 5;
const FEW_POINTS = 1000;

// Colour and dashes both tell candidates apart: neighbours differ in both, and no two of 35 share both.
function lineStyle(index) {
  return { ink: `var(--ink-${index % INKS})`, dashes: DASHES[index % DASHES.length] };
}

function styled(path, index) {
  const { ink, dashes } = lineStyle(index);
  path.style.stroke = ink;
  if (dashes) path.setAttribute("stroke-dasharray", dashes);
  return path;
}

// A sample of a candidate's line with its number, for lists and heads of columns.
function swatch(index) {
  const line = styled(drawn("path", { d: "M0 7H34", class: "line" }), index);
  return drawn("svg", { class: "swatch", viewBox: "0 0 34 14", width: 34, height: 14, "aria-hidden": "true" }, line);
}

// The first point after `time`.
function firstAfter(line, time) {
  let low = 0;
  let high = line.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (line[middle][0] <= time) low = middle + 1;
    else high = middle;
  }
  return low;
}

// The value at a time; at a jump, the one after it.
function valueAt(line, time) {
  const index = firstAfter(line, time);
  if (index === 0) return line[0][1];
  if (index === line.length) return line.at(-1)[1];
  const [[before, value], [after, next]] = [line[index - 1], line[index]];
  return value + ((next - value) * (time - before)) / (after - before);
}

// The points from `start` to `end`, with values at both ends.
function stretchOf(line, start, end) {
  const inner = line.slice(firstAfter(line, start), firstAfter(line, end));
  return [[start, valueAt(line, start)], ...inner, [end, valueAt(line, end)]];
}

// As many points as a picture of time can show: of those in one column of pixels, the lowest and the highest.
function thinned(points, x) {
  if (points.length <= FEW_POINTS) return points;
  const kept = [points[0]];
  for (let begin = 0, end = 0; begin < points.length; begin = end) {
    const column = Math.floor(x(points[begin][0]));
    let [low, high] = [begin, begin];
    for (; end < points.length && Math.floor(x(points[end][0])) === column; end++) {
      if (points[end][1] < points[low][1]) low = end;
      if (points[end][1] > points[high][1]) high = end;
    }
    kept.push(points[Math.min(low, high)], points[Math.max(low, high)]);
  }
  return [...kept, points.at(-1)];
}

// What moves while the rest stands still has a layer of its own, so that a picture of many lines is not painted anew
// with every frame.
function layerOver(box) {
  const layer = drawn("svg", { class: "layer", "aria-hidden": "true", focusable: "false" });
  box.append(layer);
  return layer;
}

function pathOf(points, x, y) {
  let text = "M";
  for (const [across, up] of points) text += `${x(across).toFixed(1)} ${y(up).toFixed(1)}L`;
  return text.slice(0, -1);
}

// Round steps for an axis: the smallest of 1, 2 and 5 times a power of ten that is at least `least`.
function roundStep(least) {
  const power = 10 ** Math.floor(Math.log10(least));
  return [1, 2, 5, 10].map((factor) => factor * power).find((step) => step >= least * (1 - 1e-9));
}
