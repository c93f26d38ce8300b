// The facts side by side: in words first, then as tables with a column for each candidate.

const EQUAL_WORDS = {
  landing: "takes equally long to land",
  midpoint: "is half-way equally soon",
  rise: "takes equally long from 10 to 90 %",
};

// How much of each difference counts as one step when rows are put in order, and from where on it is told.
const GLIDE_STEPS = { landing_s: 0.05, short_by_cents: 20, in_tune_fraction: 0.1 };
const GATE_STEPS = { attack_10_90_s: 0.01, peak_loss_db: 1, gap_db: 3 };
const TOLD = { landing_s: 0.001, short_by_cents: 1, in_tune_fraction: 0.01, attack_10_90_s: 0.001, peak_loss_db: 0.1, gap_db: 0.5 };
const PRINT = matchMedia("print");
const MIXED_STEPS = 1000; // one lands and another does not, or one clicks

class Figures {
  // `show(start, end)` brings a stretch of time into view.
  constructor(body, data, show) {
    this.data = data;
    this.show = show;
    body.append(
      this.words(), ...this.equalWords(), ...this.warnings(),
      ...this.glideTable(), ...this.gateTable(), ...this.loudnessTable(), ...this.settingsTable(),
    );
  }

  get candidates() {
    return this.data.candidates;
  }

  whose(index) {
    return [`${index + 1} `, named(this.candidates[index].label)];
  }

  // In words

  words() {
    const lines = this.candidates.map(({ facts }, index) => {
      const never = facts.glides.filter((glide) => glide.landing_s === null);
      return element("li", {}, element("b", {}, ...this.whose(index)), ": ", this.landingWords(facts.glides, never));
    });
    return element("div", {}, element("h3", {}, "What lands"), element("ul", { class: "plain" }, ...lines));
  }

  landingWords(glides, never) {
    if (glides.length === 0) return "there is no glide; the target never changes.";
    if (never.length === 0) {
      const slowest = glides.reduce((one, other) => (other.landing_s > one.landing_s ? other : one));
      if (slowest.landing_s === 0) return `all ${counted(glides.length, "glide")} land at once.`;
      return `all ${counted(glides.length, "glide")} land, the slowest after ${duration(slowest.landing_s)} (${placeOf(slowest)}).`;
    }
    const worst = never.reduce((one, other) => (other.short_by_cents > one.short_by_cents ? other : one));
    const many = `${never.length} of ${counted(glides.length, "glide")} never land${never.length === 1 ? "s" : ""}`;
    const late = worst.short_by_cents > 100 * Math.abs(worst.interval_semitones) ? ", where the pitch is still on its way from earlier glides" : "";
    return `${many} before the next change; the one farthest from its note is then still ${cents(worst.short_by_cents)} away (${placeOf(worst)}${late}).`;
  }

  equalWords() {
    const { equal } = this.data;
    const heading = element("h3", {}, "What is equal, and what still differs");
    if (!EQUAL_WORDS[equal.mode]) {
      return [heading, element("p", {}, "Every candidate plays with its times as set; none was rescaled.")];
    }
    const times = [["up", equal.up_s], ["down", equal.down_s]].filter(([, time]) => typeof time === "number");
    const said = times.map(([way, time]) => `${duration(time)} ${way}`).join(", ");
    const glide = `A glide of ${Number(equal.interval_semitones)} semitones from ${equal.from}`;
    const words = `${glide} ${EQUAL_WORDS[equal.mode]} in every candidate${said ? `: ${said}` : ""}. Times were rescaled for that.`;
    const lists = this.candidates.map(({ differs }, index) => this.differences(differs, index));
    return [heading, element("p", {}, words), ...lists];
  }

  differences(differs, index) {
    if (differs.length === 0) {
      return element("p", {}, element("b", {}, ...this.whose(index)), ": differs from the preset on no interval.");
    }
    const lines = differs.map((line) => element("li", {}, named(line)));
    const summary = element("summary", {}, element("b", {}, ...this.whose(index)), `: still differs from the preset on ${counted(differs.length, "interval")}`);
    return element("details", { open: differs.length <= 4 }, summary, element("ul", {}, ...lines));
  }

  warnings() {
    const lines = this.candidates.flatMap(({ warnings }, index) =>
      (warnings ?? []).map((line) => element("li", {}, element("b", {}, ...this.whose(index)), ": ", named(line))));
    return lines.length ? [element("h3", {}, "To be aware of"), element("ul", { class: "plain" }, ...lines)] : [];
  }

  // Glides and gates

  glideTable() {
    const rows = alignedRows(this.candidates.map(({ facts }) => facts.glides), GLIDE_STEPS, "landing_s");
    return this.comparedTable({
      rows, caption: "Glides", noun: "glide", head: "Glide, semitones",
      note: `Landed means within ${Number(this.data.tolerance_cents)} cents of the note, from then on. The bar is the share of the note that is in tune.`,
      first: (row) => this.glideHead(row), cell: glideCell,
    });
  }

  gateTable() {
    const rows = alignedRows(this.candidates.map(({ facts }) => facts.gates), GATE_STEPS, "edge_click");
    return this.comparedTable({
      rows, caption: "Gates", noun: "gate", head: "Gate opens",
      note: "The rise from 10 to 90 %, what the slew takes off the peak, and how far the gain falls before the next gate.",
      first: (row) => this.gateHead(row), cell: gateCell,
    });
  }

  glideHead({ sample, until }) {
    const name = `${sample.from} \u2192 ${sample.to}`;
    const says = `Show ${sample.from} to ${sample.to} at ${clock(sample.start_s)} in the curves and loop it`;
    return [
      element("button", { type: "button", class: "go", "aria-label": says, click: () => this.go(sample, until) }, name),
      element("small", {}, `${signed(sample.interval_semitones, sample.interval_semitones % 1 ? 2 : 0)} at ${clock(sample.start_s)}`),
    ];
  }

  gateHead({ sample, until }) {
    const says = `Show the gate at ${clock(sample.start_s)} in the curves and loop it`;
    return [element("button", { type: "button", class: "go", "aria-label": says, click: () => this.go(sample, until) }, clock(sample.start_s))];
  }

  go(sample, until) {
    const before = Math.min(0.1, sample.start_s);
    this.show(sample.start_s - before, Math.max(until ?? sample.start_s + 1, sample.start_s + 0.1));
  }

  // At first only the rows with the largest differences are there; the rest is made when it is asked for, or printed.
  comparedTable({ rows, caption, noun, head, note, first, cell }) {
    if (rows.length === 0) return [];
    const differing = rows.filter((row) => row.score > 0).length;
    const byScore = [...rows].sort((one, other) => other.score - one.score);
    const made = new Map();
    const rowOf = (row) => {
      if (!made.has(row)) made.set(row, comparedRow(row, first, cell));
      return made.get(row);
    };
    const body = element("tbody");
    const order = selection([["apart", "largest differences first"], ["time", "in order of time"]]);
    const extent = selection(extents(differing, rows.length, noun));
    const fill = (count = Number(extent.value)) => {
      const shown = new Set(byScore.slice(0, count));
      body.replaceChildren(...(order.value === "time" ? rows : byScore).filter((row) => shown.has(row)).map(rowOf));
    };
    for (const choice of [order, extent]) choice.addEventListener("change", () => fill());
    addEventListener("beforeprint", () => fill(rows.length));
    addEventListener("afterprint", () => fill());
    PRINT.addEventListener("change", () => fill(PRINT.matches ? rows.length : undefined));
    fill();
    const said = element("caption", {}, agreement(differing, rows.length, noun));
    const table = element("table", { class: "compared" }, said, this.heads(head, "Apart by"), body);
    const controls = element("p", { class: "row choices" }, element("label", {}, `${caption}: `, order), element("label", {}, "Show ", extent));
    order.setAttribute("aria-label", `${caption}: in which order`);
    extent.setAttribute("aria-label", `Show which ${noun}s`);
    return [element("h3", {}, caption), element("p", { class: "aside" }, note), controls, scrolled(table, caption)];
  }

  heads(first, ...last) {
    const columns = this.candidates.map(({ label }, index) =>
      element("th", { scope: "col" }, element("span", { class: "head" }, `${index + 1} `, swatch(index)), named(label)));
    const others = last.map((text) => element("th", { scope: "col" }, text));
    return element("thead", {}, element("tr", {}, element("th", { scope: "col" }, first), ...columns, ...others));
  }

  // Loudness and settings

  loudnessTable() {
    const { loudness } = this.data;
    const columns = ["Candidate", "Loudness", "True peak", "Gain for equal loudness", "File"];
    const head = element("tr", {}, ...columns.map((text) => element("th", { scope: "col" }, text)));
    const rows = this.candidates.map((candidate, index) => element("tr", {},
      element("th", { scope: "row" }, ...this.whose(index)),
      element("td", {}, `${fixed(candidate.lufs, 2)} LUFS`), element("td", {}, `${fixed(candidate.true_peak_dbtp)} dBTP`),
      element("td", {}, `${signed(candidate.gain_db)} dB`), element("td", {}, named(candidate.file))));
    const table = element("table", {}, element("thead", {}, head), element("tbody", {}, ...rows));
    return [element("h3", {}, "Loudness"), element("p", {}, ...this.loudnessWords(loudness)), scrolled(table, "Loudness")];
  }

  loudnessWords({ common_lufs: common, target_lufs: target, limited_by: limit, gated, metered_s }) {
    const said = [`All candidates are brought to ${fixed(common)} LUFS (ITU-R BS.1770) by one gain each.`];
    if (limit !== null && limit !== undefined) {
      said.push(` That is under the usual ${fixed(target)} LUFS, because the true peak of `, named(limit), " would pass \u22121 dBTP there.");
    }
    if (!gated) said.push(` At least one is shorter than a gating block of 400 ms: all are measured without the gate, by their energy over the same ${duration(metered_s)}.`);
    return said;
  }

  settingsTable() {
    const keys = [...new Set(this.candidates.flatMap(({ settings }) => Object.keys(settings)))];
    const differing = keys.filter((key) => new Set(this.candidates.map(({ settings }) => JSON.stringify(settings[key]))).size > 1);
    const heading = element("h3", {}, "Settings that differ");
    if (differing.length === 0) return [heading, element("p", {}, "None.")];
    const rows = differing.map((key) => element("tr", {}, element("th", { scope: "row" }, element("code", {}, key)),
      ...this.candidates.map(({ settings }) => element("td", {}, named(settingText(key, settings[key]))))));
    return [heading, scrolled(element("table", {}, this.heads("Setting"), element("tbody", {}, ...rows)), "Settings that differ")];
  }
}

const FEW_ROWS = 8;

function agreement(differing, total, noun) {
  if (differing === 0) return `All candidates agree on ${total === 1 ? `the only ${noun}` : `all ${total} ${noun}s`}.`;
  return `The candidates differ on ${differing} of ${counted(total, noun)}.`;
}

// How many rows may be shown: the choices that are not the same.
function extents(differing, total, noun) {
  const choices = [
    ...(differing === 0 ? [[FEW_ROWS, `the first ${FEW_ROWS}`]] : [
      [Math.min(FEW_ROWS, differing), `the ${FEW_ROWS} largest differences`],
      [differing, `the ${counted(differing, noun)} with differences`],
    ]),
    [total, `all ${counted(total, noun)}`],
  ];
  const rising = choices.filter(([count], place) => count > 0 && choices.every(([other], later) => later <= place || other > count));
  return rising.length ? rising : choices.slice(-1);
}

function selection(choices) {
  return element("select", {}, ...choices.map(([value, words]) => element("option", { value }, words)));
}

function placeOf(glide) {
  return `${glide.from} to ${glide.to} at ${clock(glide.start_s)}`;
}

function scrolled(table, name) {
  return element("div", { class: "scrolled", tabindex: 0, role: "region", "aria-label": name }, table);
}

function settingText(key, value) {
  if (value === undefined || value === null) return "\u2013";
  if (typeof value === "boolean") return value ? "on" : "off";
  if (typeof value === "number") {
    return /\.(rise|fall|attack|decay|release)$/.test(key) ? duration(value) : String(value).replace("-", MINUS);
  }
  return String(value);
}

// One row for each moment at which any candidate has an entry; candidates without one have undefined.
function alignedRows(columns, steps, deciding) {
  const rows = new Map();
  columns.forEach((entries, index) => {
    for (const entry of entries) {
      const key = entry.start_s.toFixed(6);
      if (!rows.has(key)) rows.set(key, { sample: entry, cells: Array(columns.length).fill(undefined) });
      rows.get(key).cells[index] = entry;
    }
  });
  const found = [...rows.values()].sort((one, other) => one.sample.start_s - other.sample.start_s);
  found.forEach((row, index) => {
    row.until = found[index + 1]?.sample.start_s;
    Object.assign(row, difference(row.cells, steps, deciding));
  });
  return found;
}

// How far the candidates are apart: a score to sort by, 0 where they agree, and the words for it.
function difference(cells, steps, deciding) {
  const present = cells.filter((cell) => cell !== undefined);
  if (present.length < cells.length) return { score: MIXED_STEPS, apart: ["not in all"] };
  const yes = present.filter((cell) => cell[deciding] !== null && cell[deciding] !== false).length;
  const mixed = yes > 0 && yes < present.length;
  const apart = mixed ? [deciding === "edge_click" ? "click or none" : "lands or never"] : [];
  let score = mixed ? MIXED_STEPS : 0;
  for (const [name, step] of Object.entries(steps)) {
    const values = present.map((cell) => cell[name]).filter((value) => typeof value === "number");
    const spread = values.length < 2 ? 0 : Math.max(...values) - Math.min(...values);
    if (spread < TOLD[name] * (1 - 1e-9)) continue;
    score += spread / step;
    apart.push(spreadText(name, spread));
  }
  return { score, apart };
}

function spreadText(name, spread) {
  if (name.endsWith("_s")) return duration(spread);
  if (name.endsWith("_cents")) return cents(spread);
  return name.endsWith("_db") ? `${spread.toFixed(1)} dB` : share(spread);
}

function comparedRow(row, first, cell) {
  const cells = row.cells.map((entry) => element("td", {}, ...(entry ? cell(entry) : ["\u2013"])));
  const apart = element("td", { class: "apart" }, row.apart.map((text) => text.replaceAll(" ", "\u00a0")).join(", ") || "they agree");
  return element("tr", { class: row.score > 0 ? "differ" : "agree" }, element("th", { scope: "row" }, ...first(row)), ...cells, apart);
}

function glideCell(glide) {
  const landed = glide.landing_s !== null;
  const words = landed ? [glide.landing_s === 0 ? "at once" : duration(glide.landing_s)]
    : [element("b", { class: "never" }, "never"), `, ${cents(glide.short_by_cents)} away`];
  const bar = element("span", { class: "bar", "aria-hidden": "true" }, element("span"));
  bar.firstChild.style.width = `${100 * glide.in_tune_fraction}%`;
  const inTune = element("small", { class: "share" }, bar, element("span", {}, `${share(glide.in_tune_fraction)} in tune`));
  return [element("span", {}, ...words), inTune];
}

function gateCell(gate) {
  const attack = gate.attack_10_90_s === null ? "no rise" : gate.attack_10_90_s === 0 ? "at once" : duration(gate.attack_10_90_s);
  const click = gate.edge_click ? [", ", element("b", { class: "never" }, "edge clicks")] : [];
  const lines = [`peak lower by ${decibels(gate.peak_loss_db)}`];
  if (gate.gap_db !== null) lines.push(gate.gap_db <= -200 ? "then silent" : `then falls to ${decibels(gate.gap_db)}`);
  return [element("span", {}, attack, ...click), element("small", {}, lines.join(", "))];
}
