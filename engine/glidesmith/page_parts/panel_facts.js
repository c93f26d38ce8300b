// The facts of what is heard, never landing first; what the last move changed is marked with what it was.

const SETTLED_MS = 1500; // a pause that ends a move
const FIRST_ROWS = 10;
const CHANGED = { seconds: 0.0005, cents: 0.5, fraction: 0.005, decibels: 0.05 };

class Facts {
  constructor(body, model) {
    this.body = body;
    this.model = model;
    this.reference = null;
    this.latest = null;
    this.all = element("input", { type: "checkbox", change: () => this.draw() });
    this.summary = element("p", { class: "facts-summary" });
    this.glides = element("div", { class: "scrolled", tabindex: "0", role: "region", "aria-label": "Glides" });
    this.gates = element("div", { class: "scrolled", tabindex: "0", role: "region", "aria-label": "Gates" });
    body.append(this.summary, element("label", { class: "tick" }, this.all, "every glide and gate"), element("div", { class: "fact-tables" }, this.glides, this.gates));
  }

  show(slot, facts) {
    const now = performance.now();
    const isSame = this.latest !== null && this.slot === slot && this.latest.phrase === facts.phrase && this.latest.glides.length === facts.glides.length;
    if (!isSame) this.reference = null;
    else if (now - this.when > SETTLED_MS) this.reference = this.latest;
    Object.assign(this, { slot, latest: facts, when: now });
    this.draw();
  }

  draw() {
    if (!this.latest) return;
    const { glides, gates, tolerance_cents } = this.latest;
    const before = this.reference;
    const rows = glides.map((glide, index) => ({ glide, was: before?.glides[index] }));
    rows.sort((one, other) => (one.glide.landing_s === null ? 0 : 1) - (other.glide.landing_s === null ? 0 : 1)
      || other.glide.short_by_cents - one.glide.short_by_cents || one.glide.start_s - other.glide.start_s);
    const most = this.all.checked ? Infinity : FIRST_ROWS;
    this.sayAll(glides, gates, before);
    this.glides.replaceChildren(factTable(
      `Glides${count(rows.length, most)}: in tune means within ${Number(tolerance_cents)} cents`, ["Glide", "At", "Lands after", "In tune", "10 to 90 %", "Fastest"],
      rows.slice(0, most).map(({ glide, was }) => glideRow(glide, was))));
    this.gates.replaceChildren(factTable(
      `Gates${count(gates.length, most)}`, ["Opens at", "Rise 10 to 90 %", "Peak lower by", "Falls to, before the next", "Edge"],
      gates.slice(0, most).map((gate, index) => gateRow(gate, before?.gates[index]))));
  }

  sayAll(glides, gates, before) {
    const never = glides.filter((glide) => glide.landing_s === null);
    const clicks = gates.filter((gate) => gate.edge_click);
    const slowest = glides.reduce((most, glide) => Math.max(most, glide.landing_s ?? 0), 0);
    const landing = glides.length === 0 ? "There is no glide."
      : never.length ? `${never.length} of ${counted(glides.length, "glide")} never land${never.length === 1 ? "s" : ""}.`
        : `All ${counted(glides.length, "glide")} land${slowest === 0 ? " at once" : `, the slowest after ${duration(slowest)}`}.`;
    const clicking = clicks.length ? ` ${counted(clicks.length, "gate edge")} click${clicks.length === 1 ? "s" : ""}.` : " No gate edge clicks.";
    const changed = before ? glides.filter((glide, index) => glideChanged(glide, before.glides[index])).length : 0;
    const mark = changed ? ` ${counted(changed, "glide")} changed with the last move, marked \u25c6.` : "";
    setText(this.summary, landing + clicking + mark);
  }
}

function count(total, most) {
  return total > most ? `, ${most} of ${total}` : "";
}

function factTable(caption, heads, rows) {
  return element("table", {}, element("caption", {}, caption),
    element("thead", {}, element("tr", {}, ...heads.map((head) => element("th", { scope: "col" }, head)))),
    element("tbody", {}, ...rows));
}

function differs(one, other, least) {
  if (one === null || other === null) return one !== other;
  return Math.abs(one - other) > least;
}

function glideChanged(glide, was) {
  return was !== undefined && (differs(glide.landing_s, was.landing_s, CHANGED.seconds) || differs(glide.short_by_cents, was.short_by_cents, CHANGED.cents));
}

// A figure, and where it changed the mark and what it was.
function figure(text, was, changed) {
  const parts = typeof text === "string" ? [text] : text;
  if (!changed) return element("td", {}, ...parts);
  return element("td", { class: "changed" }, element("span", { class: "mark", "aria-hidden": "true" }, "\u25c6 "), ...parts, element("small", {}, `was ${was}`));
}

function landingText(glide) {
  if (glide.landing_s === null) return `never, ${cents(glide.short_by_cents)} short`;
  return glide.landing_s === 0 ? "at once" : duration(glide.landing_s);
}

function optional(value, text, otherwise = "\u2013") {
  return value === null ? otherwise : text(value);
}

function glideRow(glide, was) {
  const never = glide.landing_s === null;
  const lands = never ? [element("b", { class: "never" }, "never"), `, ${cents(glide.short_by_cents)} short`] : landingText(glide);
  return element("tr", {},
    element("th", { scope: "row" }, `${glide.from} \u2192 ${glide.to}`), element("td", {}, clock(glide.start_s)),
    figure(lands, was && landingText(was), glideChanged(glide, was)),
    figure(share(glide.in_tune_fraction), was && share(was.in_tune_fraction), was && differs(glide.in_tune_fraction, was.in_tune_fraction, CHANGED.fraction)),
    figure(optional(glide.rise_10_90_s, duration), was && optional(was.rise_10_90_s, duration), was && differs(glide.rise_10_90_s, was.rise_10_90_s, CHANGED.seconds)),
    element("td", {}, glide.max_rate_semitones_per_s === 0 ? "jumps" : `${Number(glide.max_rate_semitones_per_s.toPrecision(3))} /s`));
}

function gateRow(gate, was) {
  const attack = (value) => (value === null ? "no rise" : value === 0 ? "at once" : duration(value));
  const edge = gate.edge_click ? [element("b", { class: "never" }, "clicks")] : "smooth";
  return element("tr", {},
    element("th", { scope: "row" }, clock(gate.start_s)),
    figure(attack(gate.attack_10_90_s), was && attack(was.attack_10_90_s), was && differs(gate.attack_10_90_s, was.attack_10_90_s, CHANGED.seconds)),
    figure(decibels(gate.peak_loss_db), was && decibels(was.peak_loss_db), was && differs(gate.peak_loss_db, was.peak_loss_db, CHANGED.decibels)),
    figure(optional(gate.gap_db, decibels), was && optional(was.gap_db, decibels), was && differs(gate.gap_db, was.gap_db, CHANGED.decibels)),
    figure(edge, was && (was.edge_click ? "clicks" : "smooth"), was && was.edge_click !== gate.edge_click));
}
