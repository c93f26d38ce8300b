// How loud it is: bars with their figures, from the engine's own meters.

const METERS = [
  ["momentary", "Momentary", "LUFS", -60, 0], ["shortTerm", "Short-term", "LUFS", -60, 0],
  ["truePeak", "True peak", "dBTP", -60, 0], ["reduction", "Limiter takes", "dB", 0, 12],
];
const TEXT_EVERY_MS = 150;

class Meters {
  constructor(box) {
    this.bars = METERS.map(([name, words, unit, low, high]) => {
      const fill = element("span");
      const text = element("span", { class: "meter-text", "aria-hidden": "true" });
      const bar = element("span", { class: "bar", role: "meter", "aria-label": words, "aria-valuemin": low, "aria-valuemax": high, "aria-valuenow": low }, fill);
      box.append(element("div", { class: "meter" }, element("span", {}, words), bar, text));
      return { name, unit, low, high, fill, text, bar };
    });
    this.next = 0;
  }

  show(levels, ceiling) {
    const now = performance.now();
    const isTime = now >= this.next;
    if (isTime) this.next = now + TEXT_EVERY_MS;
    for (const { name, unit, low, high, fill, text, bar } of this.bars) {
      const value = name === "reduction" ? Math.abs(levels[name]) % 200 : levels[name];
      fill.style.transform = `scaleX(${clamp((value - low) / (high - low), 0, 1).toFixed(3)})`;
      if (!isTime) continue;
      const words = value <= -200 ? "silent" : `${fixed(value)} ${unit}`;
      setText(text, words);
      bar.setAttribute("aria-valuenow", clamp(value, low, high).toFixed(1));
      bar.setAttribute("aria-valuetext", words);
      bar.classList.toggle("hot", name === "truePeak" ? value > ceiling : name === "reduction" && value > 0.05);
    }
  }
}
