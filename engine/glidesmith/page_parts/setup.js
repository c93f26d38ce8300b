// What is chosen before a blind round: who listens, to which candidates, how often, and to which stretch.

const CONFIDENCES = [0.95, 0.99, 0.999];
const USUAL_TRIALS = [8, 10, 12, 16, 20, 25, 30, 50];
const SHORTEST_EXCERPT_S = 0.2;

class Setup {
  // `offered()` is the stretch that is looped on the page, or null; `begin(kind, choices)` begins a round.
  constructor(data, offered, begin) {
    Object.assign(this, { data, offered, begin, ownExcerpt: false });
    this.lengths = data.candidates.map(({ frames }) => frames / data.sample_rate);
    this.memory = `glidesmith ${data.set} setup`;
    this.makeFields();
    this.form = this.makeForm();
    [this.start.value, this.end.value] = this.offeredExcerpt;
    this.restore();
    this.update();
  }

  // Fields

  makeFields() {
    const update = () => this.update();
    const number = (id, name, max, step, input) => element("input", { type: "number", id, min: 0, max, step, inputmode: "decimal", "aria-label": name, input });
    const radio = (id, checked) => element("input", { type: "radio", name: "kind", id, checked, change: update });
    const choice = (id) => element("select", { id, change: update }, ...this.data.candidates.map(({ label }, index) => element("option", { value: index }, `${index + 1} ${label}`)));
    const editExcerpt = () => this.editExcerpt();
    this.listener = element("input", { type: "text", id: "listener", maxlength: 80, autocomplete: "off", "aria-describedby": "blind-problem", input: update });
    this.abx = radio("kind-abx", true);
    this.preference = radio("kind-preference", false);
    [this.first, this.second] = ["first", "second"].map(choice);
    this.second.selectedIndex = 1;
    this.trials = element("input", { type: "number", id: "trials", value: 16, min: FEWEST_TRIALS, max: MOST_TRIALS, step: 1, inputmode: "numeric", input: update });
    this.included = this.data.candidates.map((_, index) => element("input", { type: "checkbox", name: "included", id: `included-${index + 1}`, checked: true, change: update }));
    this.start = number("excerpt-start", "Excerpt from, in seconds", Math.max(...this.lengths), 0.001, editExcerpt);
    this.end = number("excerpt-end", "Excerpt to, in seconds", Math.max(...this.lengths), 0.001, editExcerpt);
    this.asLoop = element("button", { type: "button", id: "excerpt-as-loop", click: () => this.followLoop() }, "Take the loop");
    this.problem = element("p", { id: "blind-problem", class: "problem", role: "alert" });
  }

  makeForm() {
    const line = (...parts) => element("p", { class: "row" }, ...parts);
    this.needed = element("p", { id: "needed", "aria-live": "polite" });
    this.pairs = element("p", { id: "pairs", "aria-live": "polite" });
    this.forPair = element("div", {},
      line(element("label", {}, "Between ", this.first), element("label", {}, " and ", this.second), element("label", {}, "Trials ", this.trials)),
      this.needed, neededTable());
    this.forSeveral = element("fieldset", { id: "included" }, element("legend", {}, "Candidates in this round"),
      ...this.data.candidates.map(({ label }, index) => element("label", { class: "tick" }, this.included[index], element("span", {}, `${index + 1} `, named(label)))), this.pairs);
    return element("form", { id: "blind-form", novalidate: true, submit: (event) => this.submit(event) },
      line(element("label", {}, "Listener ", this.listener)),
      element("fieldset", { class: "row" }, element("legend", { class: "unseen" }, "Kind of round"),
        element("label", { class: "tick" }, this.abx, " A/B/X: can two be told apart?"),
        element("label", { class: "tick" }, this.preference, " Preference: which is better?")),
      this.forPair, this.forSeveral,
      line(element("span", {}, "Excerpt from"), this.start, element("span", {}, "to"), this.end, element("span", {}, "s"), this.asLoop),
      element("p", { class: "aside" }, "Candidates are equally loud over the whole phrase. An excerpt is not matched anew: within it one may be louder than another, and be told by that."),
      this.problem, line(element("button", { type: "submit", class: "main" }, "Begin the round")));
  }

  get kind() {
    return this.abx.checked ? AbxRound : PreferenceRound;
  }

  get chosen() {
    if (this.abx.checked) return [this.first, this.second].map(({ value }) => Number(value));
    return [...this.included.keys()].filter((index) => this.included[index].checked);
  }

  // Both clips of a trial are equally long: as long as the shortest that is chosen.
  get shortest() {
    return Math.min(...(this.chosen.length ? this.chosen : [...this.lengths.keys()]).map((index) => this.lengths[index]));
  }

  get hasTrials() {
    const trials = Number(this.trials.value);
    return Number.isInteger(trials) && trials >= FEWEST_TRIALS && trials <= MOST_TRIALS;
  }

  // Excerpt: the loop, or all, until it is set by hand.

  get offeredExcerpt() {
    return (this.offered() ?? [0, Math.min(...this.lengths)]).map((time) => time.toFixed(3));
  }

  takeExcerpt() {
    if (this.ownExcerpt) return;
    [this.start.value, this.end.value] = this.offeredExcerpt;
    this.update();
  }

  editExcerpt() {
    this.ownExcerpt = true;
    this.update();
  }

  followLoop() {
    this.ownExcerpt = false;
    this.takeExcerpt();
  }

  // What follows from what is chosen

  update() {
    this.forPair.hidden = !this.abx.checked;
    this.forSeveral.hidden = this.abx.checked;
    const trials = Number(this.trials.value);
    this.needed.textContent = this.hasTrials
      ? `Of ${trials} trials, so many must be right that guessing does it rarely enough: ${neededWords(trials)} confidence.`
      : `Give ${FEWEST_TRIALS} to ${MOST_TRIALS} trials.`;
    this.pairs.textContent = `${counted(pairCount(this.chosen.length), "pair")}: every chosen candidate with every other, in an order drawn by lot, each about as often A as B.`;
    this.remember();
  }

  // What keeps a round from beginning, as [field, words], or null.
  get mistake() {
    const { chosen, shortest } = this;
    const [from, to] = [Number(this.start.value), Math.min(Number(this.end.value), shortest)];
    if (this.listener.value.trim() === "") return [this.listener, "Give the listener's name or initials; sheets are counted by listener."];
    if (this.abx.checked && chosen[0] === chosen[1]) return [this.second, "Choose two different candidates."];
    if (this.abx.checked && !this.hasTrials) return [this.trials, `Give ${FEWEST_TRIALS} to ${MOST_TRIALS} trials, a whole number.`];
    if (chosen.length < 2) return [this.included[0], "Choose two candidates at least."];
    if (!(from >= 0 && to - from >= SHORTEST_EXCERPT_S - 1e-9)) return [this.start, `Choose an excerpt of at least ${duration(SHORTEST_EXCERPT_S)} within ${clock(shortest)}, the shortest clip's length.`];
    return null;
  }

  submit(event) {
    event.preventDefault();
    for (const field of [this.listener, this.second, this.trials, this.included[0], this.start]) field.removeAttribute("aria-invalid");
    const { mistake } = this;
    this.problem.textContent = mistake?.[1] ?? "";
    if (mistake) {
      mistake[0].setAttribute("aria-invalid", "true");
      mistake[0].focus();
      return;
    }
    const excerpt = [Number(this.start.value), Math.min(Number(this.end.value), this.shortest)].map((time) => Number(time.toFixed(3)));
    this.begin(this.kind, { listener: this.listener.value.trim(), chosen: this.chosen, trials: Number(this.trials.value), excerpt });
  }

  // A reload keeps what was chosen; it is this tab's alone, since the next listener may sit at another.

  remember() {
    const values = ["listener", "first", "second", "trials", "start", "end"].map((name) => [name, this[name].value]);
    const included = this.included.map(({ checked }) => checked);
    try {
      sessionStorage.setItem(this.memory, JSON.stringify({ ...Object.fromEntries(values), preference: this.preference.checked, included }));
    } catch {
      // Without storage a reload forgets.
    }
  }

  restore() {
    try {
      const { preference, included, ...values } = JSON.parse(sessionStorage.getItem(this.memory));
      for (const [name, value] of Object.entries(values)) this[name].value = value;
      this.preference.checked = preference;
      included.forEach((checked, index) => { this.included[index].checked = checked; });
      this.ownExcerpt = String([this.start.value, this.end.value]) !== String(this.offeredExcerpt);
    } catch {
      // Nothing was chosen before, or it can't be read.
    }
  }
}

function neededWords(trials) {
  const needed = CONFIDENCES.map((confidence) => [confidence, correctNeeded(trials, confidence)]).filter(([, count]) => count !== null);
  return needed.map(([confidence, count]) => `${count} for ${100 * confidence} %`).join(", ");
}

function neededTable() {
  const heads = ["Trials", ...CONFIDENCES.map((confidence) => `${100 * confidence} %`)];
  const rows = USUAL_TRIALS.map((n) => element("tr", {}, element("th", { scope: "row" }, String(n)),
    ...CONFIDENCES.map((confidence) => element("td", {}, String(correctNeeded(n, confidence) ?? "\u2013")))));
  const table = element("table", { id: "needed-table" }, element("thead", {}, element("tr", {}, ...heads.map((text) => element("th", { scope: "col" }, text)))), element("tbody", {}, ...rows));
  return element("details", {}, element("summary", {}, "How many correct answers a given confidence needs"), scrolled(table, "Correct answers needed"));
}
