// Blind listening: the setup, a round, its result and the record of rounds. While a round runs, nothing on the page
// tells which candidate is which; what an unfinished round holds is recorded too.

class BlindListening {
  // `page` hides and shows the rest: enter(), leave(), and excerpt(), the stretch chosen there, or null.
  constructor(body, data, sound, clips, page) {
    Object.assign(this, { body, data, sound, clips, page, round: null });
    this.record = new Record(data);
    this.setup = new Setup(data, () => page.excerpt(), (kind, choices) => this.start(new kind(data, choices)));
    this.recordBox = element("div", { id: "record" });
    this.record.addEventListener("change", () => this.showRecord());
    this.showSetup();
    addEventListener("beforeunload", (event) => this.round && event.preventDefault());
  }

  showSetup() {
    this.body.replaceChildren(intro(), this.setup.form, this.recordBox);
    this.showRecord();
  }

  // During a round

  start(round) {
    this.sound.pause();
    this.round = round;
    this.record.run(round.sheet.id);
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
      element("div", { class: "row answers", role: "group", "aria-label": "Answer" }, ...this.answerButtons), ...this.lossWarning(),
      element("p", { class: "row giving-up" }, element("button", { type: "button", id: "give-up", click: () => this.giveUp() }, "Give up this round")));
    heading.focus({ preventScroll: round.done > 0 });
  }

  hear(slot) {
    this.sound.choose(slot);
    this.sound.play();
    this.clipButtons.forEach((button, other) => button.setAttribute("aria-pressed", String(other === slot)));
    this.showHeard();
  }

  // A clip counts once it has sounded for a while: choosing it is not enough.
  get mayAnswer() {
    this.sound.account();
    return this.round.needed.every((slot) => this.sound.heard(slot));
  }

  showHeard() {
    const { round, mayAnswer } = this;
    for (const button of this.answerButtons) button.disabled = !mayAnswer;
    const next = mayAnswer ? "Answer when you are ready." : this.sound.levelDb <= LOWEST_DB ? "Raise the level to hear it." : round.before;
    this.hint.textContent = `${round.slots[this.sound.chosen][1]} is chosen. ${next}`;
  }

  toggle() {
    if (this.sound.wanted) this.sound.pause();
    else this.hear(this.sound.chosen);
  }

  soundTells(what) {
    if (what === "heard") this.showHeard();
    const button = byId("round-play");
    if (button) button.textContent = this.sound.wanted ? "Pause" : "Play";
  }

  key(name) {
    const slot = this.round.slots.findIndex(([key]) => key === name);
    const answer = this.round.answers.find(([key]) => key === name);
    if (slot >= 0) this.hear(slot);
    else if (answer && this.mayAnswer) this.answer(answer[2]);
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
    this.record.rest();
    this.page.leave();
    this.showSetup();
    const heading = element("h3", { tabindex: -1 }, sheet.finished ? "The round is over" : "The round was given up");
    const result = element("div", { id: "result", class: "result" }, heading, ...this.resultWords(this.record.whole(sheet)).map((words) => element("p", {}, ...words)),
      ...this.lossWarning(), element("p", { class: "row" }, this.saveButton(sheet, "Save the sheet")));
    this.body.prepend(result);
    heading.focus();
  }

  lossWarning() {
    if (!this.record.failing) return [];
    return [element("p", { class: "problem", role: "alert" }, "This browser can\u2019t keep rounds. Save the sheet before you leave this page.")];
  }

  resultWords(sheet) {
    if (!sheet.finished) return [["It is recorded as unfinished: a tally names it and does not count its answers, and later sheets tell of it."]];
    return sheet.test === "abx" ? abxWords(sheet) : preferenceWords(sheet);
  }

  // The rounds that this browser keeps, and how many more there were. What is unchanged stays, and keeps its focus.
  showRecord() {
    const { record } = this;
    const { sheets, rounds } = record;
    const over = sheets.filter(({ id }) => !record.runs(id));
    const state = JSON.stringify([rounds, sheets.length, over.length, record.failing]);
    if (state === this.shownRecord) return;
    this.shownRecord = state;
    const forgotten = rounds.length - sheets.length;
    const gone = forgotten === 0 ? "" : `${counted(forgotten, "earlier round")} of this set ${forgotten === 1 ? "is" : "are"} forgotten here. `;
    const said = element("p", { class: "aside" }, `${gone}Each sheet tells of the rounds begun on this device before it, finished or not.`);
    const others = [...new Set(sheets.map(({ set }) => set))].filter((set) => set !== this.data.set);
    const kept = [this.data.set, ...others].flatMap((set) => this.roundsOf(set, sheets.filter((sheet) => sheet.set === set), over));
    const forget = element("p", { class: "row" }, element("button", { type: "button", id: "forget", disabled: over.length === 0, click: () => this.forget() }, "Forget these rounds"));
    const parts = [element("h3", {}, "Rounds on this device"), ...this.lossWarning(), ...kept, ...(sheets.length === 0 ? [] : [forget]), said];
    this.recordBox.replaceChildren(...(rounds.length === 0 ? [] : parts));
  }

  // A tally takes sheets of one set: those of each are saved together.
  roundsOf(set, sheets, over) {
    if (sheets.length === 0) return [];
    const own = set === this.data.set;
    const ended = sheets.filter((sheet) => over.includes(sheet));
    const lines = sheets.map((sheet) => element("li", { class: "row" }, this.recordLine(sheet), ended.includes(sheet) ? this.saveButton(sheet, "Save") : ""));
    const save = element("button", { type: "button", ...(own ? { id: "save-all" } : { class: "save-others" }), disabled: ended.length === 0,
      click: () => saveSheets(ended.map((sheet) => this.record.whole(sheet)), set) }, own ? "Save all rounds" : "Save these rounds");
    const head = own ? [] : [element("p", {}, `From another set with candidates of this one (${set.slice(0, 12)}), which is tallied by itself:`)];
    return [...head, element("ul", { class: "plain" }, ...lines), element("p", { class: "row" }, save)];
  }

  recordLine({ id, test, listener, made, finished }) {
    const state = this.record.runs(id) ? "runs in another tab, and can be saved once it is over" : finished ? "finished" : "unfinished";
    return element("span", {}, `${test === "abx" ? "A/B/X" : "Preference"}, `, named(listener), `, ${new Date(made).toLocaleString()}: ${state}`);
  }

  forget() {
    if (!confirm("Forget the rounds that are listed here? Saved files stay, and later sheets still tell that there were these rounds.")) return;
    this.record.forget();
    this.showRecord();
  }

  saveButton(sheet, words) {
    return element("button", { type: "button", class: "save", click: () => saveSheet(this.record.whole(sheet)) }, words);
  }
}

function abxWords(sheet) {
  const { correct, trials, probability, labels } = sheet;
  const n = trials.length;
  const chance = `By guessing, one gets so many or more with a probability of ${probabilityText(probability)} (exact binomial, one-sided).`;
  const verdict = probability <= 0.05
    ? "That is evidence that this listener heard a difference."
    : "That shows nothing: neither that a difference is heard, nor that there is none.";
  return [[element("b", {}, `${correct} of ${n} right.`), ` ${chance} ${verdict}${repeated(sheet)}`], ["A was ", named(labels[0]), ", B was ", named(labels[1]), "."]];
}

// A result that is picked from several rounds is worth less than it looks.
function repeated({ earlier, pair }) {
  const alike = earlier.rounds.filter((round) => round.pair && [...round.pair].sort().join() === [...pair].sort().join());
  if (alike.length === 0) return "";
  return ` ${counted(alike.length, "earlier round")} of this pair ${alike.length === 1 ? "was" : "were"} begun on this device: repeating until one turns out well proves nothing.`;
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

function intro() {
  return element("p", {}, "Names, curves and figures are hidden while a round runs, both clips are cut to one length, and changing between them "
    + "passes through a short silence, so that the joint tells nothing. Choose the number of trials beforehand and stay with it. "
    + "Save the sheet at the end and send it to whoever gathers them. Nothing leaves this page by itself.");
}
