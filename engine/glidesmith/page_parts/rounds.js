// Blind listening: A/B/X over two candidates, and preference over all pairs. While a round runs, nothing on the
// page tells which candidate is which; what an unfinished round holds is recorded too.

const CONFIDENCES = [0.95, 0.99, 0.999];
const USUAL_TRIALS = [8, 10, 12, 16, 20, 25, 30, 50];
const [FEWEST_TRIALS, MOST_TRIALS] = [5, 100];
const SHORTEST_EXCERPT_S = 0.2;

const SHEET = { kind: "glidesmith listening sheet", version: 1 };

// Sheets of this set, kept by the browser where it allows that, so that leaving the page loses no round.
class Record {
  constructor(set) {
    this.key = `glidesmith ${set}`;
    try {
      const kept = JSON.parse(localStorage.getItem(this.key) ?? "[]");
      this.sheets = kept.filter((sheet) => sheet.kind === SHEET.kind && sheet.set === set);
    } catch {
      this.sheets = [];
    }
  }

  keep(sheet) {
    const place = this.sheets.findIndex(({ made }) => made === sheet.made);
    if (place < 0) this.sheets.push(sheet);
    else this.sheets[place] = sheet;
    this.store();
  }

  clear() {
    this.sheets = [];
    this.store();
  }

  store() {
    try {
      localStorage.setItem(this.key, JSON.stringify(this.sheets));
    } catch {
      // Without storage the record lasts as long as the page is open.
    }
  }
}

// What both kinds of round share: a sheet that grows, and trials over a fixed excerpt of clips.
class Round {
  constructor(data, listener, excerpt) {
    this.data = data;
    this.excerpt = excerpt;
    this.done = 0;
    this.head = { ...SHEET, set: data.set, listener, made: new Date().toISOString(), excerpt_s: excerpt };
  }

  begin() {
    this.began = performance.now();
    this.heard = new Set();
  }

  get seconds() {
    return Math.round(performance.now() - this.began) / 1000;
  }

  identity(index) {
    const { settings_sha256, label } = this.data.candidates[index];
    return { settings_sha256, label };
  }
}

class AbxRound extends Round {
  constructor(data, listener, excerpt, pair, planned) {
    super(data, listener, excerpt);
    this.planned = planned;
    this.pair = shuffle([...pair]);
    this.trials = [];
    this.begin();
  }

  // X is drawn anew for each trial, so that earlier answers tell nothing.
  begin() {
    super.begin();
    this.x = drawLot(2);
  }

  get slots() {
    return [["a", "A", this.pair[0]], ["b", "B", this.pair[1]], ["x", "X", this.pair[this.x]]];
  }

  get answers() {
    return [["1", "X is A", 0], ["2", "X is B", 1]];
  }

  get mayAnswer() {
    return this.heard.has("x");
  }

  get before() {
    return "Listen to X, then answer.";
  }

  answer(choice) {
    this.trials.push({ x: this.x, answer: choice, seconds: this.seconds });
    this.done = this.trials.length;
    if (this.done < this.planned) this.begin();
  }

  get sheet() {
    const [a, b] = this.pair.map((index) => this.identity(index));
    const correct = this.trials.filter(({ x, answer }) => x === answer).length;
    return {
      ...this.head, test: "abx", pair: [a.settings_sha256, b.settings_sha256], labels: [a.label, b.label],
      trials_planned: this.planned, trials: this.trials, correct, finished: this.done === this.planned,
      probability: guessingProbability(correct, this.done),
    };
  }
}

class PreferenceRound extends Round {
  constructor(data, listener, excerpt) {
    super(data, listener, excerpt);
    const pairs = data.candidates.flatMap((_, second) => Array.from({ length: second }, (_, first) => [first, second]));
    this.pairs = shuffle(pairs.map((pair) => shuffle(pair)));
    this.planned = pairs.length;
    this.answered = [];
    this.begin();
  }

  get slots() {
    const [first, second] = this.pairs[this.done];
    return [["a", "A", first], ["b", "B", second]];
  }

  get answers() {
    return [["1", "A is better", 0], ["2", "B is better", 1], ["0", "No preference", null]];
  }

  get mayAnswer() {
    return this.heard.has("a") && this.heard.has("b");
  }

  get before() {
    return "Listen to both, then answer.";
  }

  answer(choice) {
    const [first, second] = this.pairs[this.done];
    this.answered.push({ first, second, preferred: choice === null ? null : [first, second][choice] });
    this.done = this.answered.length;
    if (this.done < this.planned) this.begin();
  }

  get sheet() {
    return {
      ...this.head, test: "preference", candidates: this.data.candidates.map((_, index) => this.identity(index)),
      pairs: this.answered, finished: this.done === this.planned,
    };
  }
}

class BlindListening {
  // `page` hides and shows the rest: enter(), leave(), and excerpt(), the stretch chosen there, or null.
  constructor(body, data, sound, clips, page) {
    Object.assign(this, { body, data, sound, clips, page, round: null });
    this.record = new Record(data.set);
    this.showSetup();
    addEventListener("beforeunload", (event) => this.round && event.preventDefault());
  }

  get lengths() {
    return this.data.candidates.map(({ frames }) => frames / this.data.sample_rate);
  }

  // Before a round

  showSetup() {
    this.fields = this.setupFields();
    const { listener, abx, preference, first, second, trials, start, end, problem } = this.fields;
    const line = (...parts) => element("p", { class: "row" }, ...parts);
    const pairCount = (this.clips.length * (this.clips.length - 1)) / 2;
    this.forPair = element("div", {},
      line(element("label", {}, "Between ", first), element("label", {}, " and ", second), element("label", {}, "Trials ", trials)),
      element("p", { id: "needed", "aria-live": "polite" }), this.neededTable());
    this.forAll = element("p", {}, `${counted(pairCount, "pair")}: every candidate with every other, in an order drawn by lot.`);
    const form = element("form", { id: "blind-form", novalidate: true, submit: (event) => this.submit(event) },
      line(element("label", {}, "Listener ", listener)),
      element("fieldset", { class: "row" }, element("legend", { class: "unseen" }, "Kind of round"),
        element("label", { class: "tick" }, abx, " A/B/X: can two be told apart?"),
        element("label", { class: "tick" }, preference, " Preference: which is better?")),
      this.forPair, this.forAll,
      line(element("label", {}, "Excerpt from ", start), element("label", {}, " to ", end), "s"),
      problem, line(element("button", { type: "submit", class: "main" }, "Begin the round")));
    this.body.replaceChildren(this.intro(), form, this.recordList());
    this.updateSetup();
  }

  setupFields() {
    const previous = this.fields;
    const number = (id, value, min, max, step) => element("input", { type: "number", id, value, min, max, step, inputmode: "decimal", input: () => this.updateSetup() });
    const options = () => this.data.candidates.map(({ label }, index) => element("option", { value: index }, `${index + 1} ${label}`));
    const [start, end] = this.offeredExcerpt;
    const fields = {
      listener: element("input", { type: "text", id: "listener", maxlength: 80, autocomplete: "off", "aria-describedby": "blind-problem" }),
      abx: element("input", { type: "radio", name: "kind", id: "kind-abx", checked: true, change: () => this.updateSetup() }),
      preference: element("input", { type: "radio", name: "kind", id: "kind-preference", change: () => this.updateSetup() }),
      first: element("select", { id: "first", change: () => this.updateSetup() }, ...options()),
      second: element("select", { id: "second", change: () => this.updateSetup() }, ...options()),
      trials: number("trials", 16, FEWEST_TRIALS, MOST_TRIALS, 1),
      start: number("excerpt-start", start, 0, Math.max(...this.lengths), 0.001),
      end: number("excerpt-end", end, 0, Math.max(...this.lengths), 0.001),
      problem: element("p", { id: "blind-problem", class: "problem", role: "alert" }),
    };
    fields.listener.value = previous?.listener.value ?? "";
    fields.second.selectedIndex = 1;
    return fields;
  }

  // The loop, or all.
  get offeredExcerpt() {
    return (this.page.excerpt() ?? [0, Math.min(...this.lengths)]).map((time) => time.toFixed(3));
  }

  offerExcerpt() {
    [this.fields.start.value, this.fields.end.value] = this.offeredExcerpt;
  }

  intro() {
    return element("p", {}, "Names, curves and figures are hidden while a round runs, both clips are cut to one length, and changing between them "
      + "passes through a short silence, so that the joint tells nothing. Choose the number of trials beforehand and stay with it. "
      + "Save the sheet at the end and send it to whoever gathers them. Nothing leaves this page by itself.");
  }

  neededTable() {
    const heads = ["Trials", ...CONFIDENCES.map((confidence) => `${100 * confidence} %`)];
    const rows = USUAL_TRIALS.map((n) => element("tr", {}, element("th", { scope: "row" }, String(n)),
      ...CONFIDENCES.map((confidence) => element("td", {}, String(correctNeeded(n, confidence) ?? "\u2013")))));
    const table = element("table", { id: "needed-table" }, element("thead", {}, element("tr", {}, ...heads.map((text) => element("th", { scope: "col" }, text)))), element("tbody", {}, ...rows));
    return element("details", {}, element("summary", {}, "How many correct answers a given confidence needs"), scrolled(table, "Correct answers needed"));
  }

  updateSetup() {
    const { abx, trials } = this.fields;
    this.forPair.hidden = !abx.checked;
    this.forAll.hidden = abx.checked;
    const n = Number(trials.value);
    const valid = Number.isInteger(n) && n >= FEWEST_TRIALS && n <= MOST_TRIALS;
    const needed = valid ? CONFIDENCES.map((confidence) => [confidence, correctNeeded(n, confidence)]).filter(([, count]) => count !== null) : [];
    const words = needed.map(([confidence, count]) => `${count} for ${100 * confidence} %`).join(", ");
    this.forPair.querySelector("#needed").textContent = valid
      ? `Of ${n} trials, so many must be right that guessing does it rarely enough: ${words} confidence.`
      : `Give ${FEWEST_TRIALS} to ${MOST_TRIALS} trials.`;
  }

  // What keeps a round from beginning, as [field, words], or null.
  problemOf() {
    const { listener, abx, first, second, trials, start, end } = this.fields;
    const n = Number(trials.value);
    if (listener.value.trim() === "") return [listener, "Give the listener's name or initials; sheets are counted by listener."];
    if (abx.checked && first.value === second.value) return [second, "Choose two different candidates."];
    if (abx.checked && !(Number.isInteger(n) && n >= FEWEST_TRIALS && n <= MOST_TRIALS)) return [trials, `Give ${FEWEST_TRIALS} to ${MOST_TRIALS} trials, a whole number.`];
    const shortest = Math.min(...(abx.checked ? [first, second].map(({ value }) => this.lengths[value]) : this.lengths));
    const [from, to] = [Number(start.value), Math.min(Number(end.value), shortest)];
    if (!(from >= 0 && to - from >= SHORTEST_EXCERPT_S)) return [start, `Choose an excerpt of at least ${duration(SHORTEST_EXCERPT_S)} within ${clock(shortest)}, the shortest clip's length.`];
    return null;
  }

  submit(event) {
    event.preventDefault();
    const { listener, abx, first, second, trials, start, end, problem } = this.fields;
    for (const field of [listener, second, trials, start]) field.removeAttribute("aria-invalid");
    const found = this.problemOf();
    problem.textContent = found?.[1] ?? "";
    if (found) {
      found[0].setAttribute("aria-invalid", "true");
      found[0].focus();
      return;
    }
    const name = listener.value.trim();
    const pair = [Number(first.value), Number(second.value)];
    const shortest = Math.min(...(abx.checked ? pair : this.lengths.keys()).map((index) => this.lengths[index]));
    const excerpt = [Number(start.value), Math.min(Number(end.value), shortest)].map((time) => Number(time.toFixed(3)));
    this.start(abx.checked ? new AbxRound(this.data, name, excerpt, pair, Number(trials.value)) : new PreferenceRound(this.data, name, excerpt));
  }

  // During a round

  start(round) {
    this.round = round;
    this.record.keep(round.sheet);
    this.page.enter();
    this.showTrial();
  }

  showTrial() {
    const { round } = this;
    this.sound.load(round.slots.map(([, , index]) => this.clips[index]), round.excerpt[1], { discreet: true });
    this.sound.setLoop(round.excerpt);
    this.sound.seek(round.excerpt[0]);
    this.clipButtons = round.slots.map(([key, name], slot) =>
      element("button", { type: "button", class: "clip", "data-key": key, "aria-pressed": "false", click: () => this.hear(slot) }, element("span", {}, name), element("kbd", {}, key)));
    this.answerButtons = round.answers.map(([key, words, choice]) =>
      element("button", { type: "button", "data-key": key, disabled: true, click: () => this.answer(choice) }, `${words} `, element("kbd", {}, key)));
    const noun = round instanceof AbxRound ? "Trial" : "Pair";
    this.hint = element("p", { role: "status", "aria-live": "polite", class: "hint" }, round.before);
    const heading = element("h3", { tabindex: -1, id: "trial" }, `${noun} ${round.done + 1} of ${round.planned}`);
    this.body.replaceChildren(
      heading, element("progress", { max: round.planned, value: round.done, "aria-label": "Answered so far" }),
      element("div", { class: "clips", role: "group", "aria-label": "Clips" }, ...this.clipButtons),
      element("p", { class: "row" }, element("button", { type: "button", id: "round-play", click: () => this.toggle() }, "Play"), this.hint),
      element("div", { class: "row answers", role: "group", "aria-label": "Answer" }, ...this.answerButtons),
      element("p", { class: "row giving-up" }, element("button", { type: "button", id: "give-up", click: () => this.giveUp() }, "Give up this round")));
    heading.focus({ preventScroll: round.done > 0 });
  }

  hear(slot) {
    this.sound.choose(slot);
    this.sound.play();
    this.heard(slot);
  }

  heard(slot) {
    const { round } = this;
    round.heard.add(round.slots[slot][0]);
    for (const button of this.answerButtons) button.disabled = !round.mayAnswer;
    this.clipButtons.forEach((button, other) => button.setAttribute("aria-pressed", String(other === slot)));
    const name = round.slots[slot][1];
    this.hint.textContent = round.mayAnswer ? `${name} is chosen. Answer when you are ready.` : `${name} is chosen. ${round.before}`;
  }

  toggle() {
    if (this.sound.playing) this.sound.pause();
    else this.hear(this.sound.chosen);
  }

  showPlaying() {
    const button = byId("round-play");
    if (button) button.textContent = this.sound.playing ? "Pause" : "Play";
  }

  key(name) {
    const slot = this.round.slots.findIndex(([key]) => key === name);
    const answer = this.round.answers.find(([key]) => key === name);
    if (slot >= 0) this.hear(slot);
    else if (answer && this.round.mayAnswer) this.answer(answer[2]);
    else if (name === " ") this.toggle();
    else return false;
    return true;
  }

  answer(choice) {
    this.sound.pause();
    this.round.answer(choice);
    this.record.keep(this.round.sheet);
    if (this.round.done < this.round.planned) this.showTrial();
    else this.finish();
  }

  giveUp() {
    this.record.keep(this.round.sheet);
    this.finish();
  }

  // After a round

  finish() {
    const { sheet } = this.round;
    this.round = null;
    this.page.leave();
    this.showSetup();
    const heading = element("h3", { tabindex: -1 }, sheet.finished ? "The round is over" : "The round was given up");
    const result = element("div", { id: "result", class: "result" }, heading, ...this.resultWords(sheet).map((words) => element("p", {}, ...words)),
      element("p", { class: "row" }, this.saveButton(sheet, "Save the sheet")));
    this.body.prepend(result);
    heading.focus();
  }

  resultWords(sheet) {
    if (!sheet.finished) return [["It is recorded as unfinished, and counts as such when sheets are added up."]];
    return sheet.test === "abx" ? abxWords(sheet) : preferenceWords(sheet);
  }

  recordList() {
    const { sheets } = this.record;
    if (sheets.length === 0) return "";
    const lines = sheets.map((sheet) => element("li", { class: "row" },
      element("span", {}, `${sheet.test === "abx" ? "A/B/X" : "Preference"}, `, named(sheet.listener), `, ${new Date(sheet.made).toLocaleString()}: ${sheet.finished ? "finished" : "unfinished"}`),
      this.saveButton(sheet, "Save")));
    const forget = element("button", { type: "button", click: () => this.forget() }, "Forget these rounds");
    return element("div", { id: "record" }, element("h3", {}, "Rounds on this device"), element("ul", { class: "plain" }, ...lines), element("p", { class: "row" }, forget));
  }

  forget() {
    if (!confirm("Forget all rounds that this browser keeps of this set? Saved files stay.")) return;
    this.record.clear();
    byId("record").remove();
  }

  saveButton(sheet, words) {
    return element("button", { type: "button", class: "save", click: () => saveSheet(sheet) }, words);
  }
}

function abxWords(sheet) {
  const { correct, trials, probability, labels } = sheet;
  const n = trials.length;
  const chance = `By guessing, one gets so many or more with a probability of ${probabilityText(probability)} (exact binomial, one-sided).`;
  const verdict = probability <= 0.05
    ? "That is evidence that this listener heard a difference."
    : "That shows nothing: neither that a difference is heard, nor that there is none.";
  return [[element("b", {}, `${correct} of ${n} right.`), ` ${chance} ${verdict}`], ["A was ", named(labels[0]), ", B was ", named(labels[1]), "."]];
}

function preferenceWords(sheet) {
  const wins = sheet.candidates.map((_, index) => sheet.pairs.filter(({ preferred }) => preferred === index).length);
  const ties = sheet.pairs.filter(({ preferred }) => preferred === null).length;
  const order = wins.map((_, index) => index).sort((one, other) => wins[other] - wins[one]);
  const parts = order.flatMap((index, place) => [place ? ", " : "", named(sheet.candidates[index].label), ` ${wins[index]}`]);
  return [["Times preferred, each in ", counted(sheet.candidates.length - 1, "pair"), ": ", ...parts, "."],
    [`${ties ? `No preference in ${counted(ties, "pair")}. ` : ""}One round of one listener shows little; add up several.`]];
}

function probabilityText(probability) {
  return probability >= 0.001 ? `${Number((100 * probability).toPrecision(3))} %` : probability.toExponential(2).replace("-", MINUS);
}

function saveSheet(sheet) {
  const who = sheet.listener.normalize("NFKD").replace(/[^A-Za-z0-9]+/g, "-").replace(/^-+|-+$/g, "").toLowerCase() || "listener";
  const when = sheet.made.replace(/\.\d+/, "").replace(/[:T]/g, "-").replace("Z", "");
  const link = element("a", { download: `${sheet.test}-${who}-${when}.json` });
  link.href = URL.createObjectURL(new Blob([`${JSON.stringify(sheet, null, 1)}\n`], { type: "application/json" }));
  link.click();
  setTimeout(() => URL.revokeObjectURL(link.href), 10000);
}
