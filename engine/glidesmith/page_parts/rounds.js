// Blind rounds: A/B/X over two candidates, and preference over pairs of several. Each knows what is to be heard and
// answered next, and what its sheet holds so far.

const [FEWEST_TRIALS, MOST_TRIALS] = [5, 100];

// What both kinds of round share: a sheet that grows, and trials over a fixed excerpt of clips.
class Round {
  constructor(data, { listener, excerpt }) {
    this.data = data;
    this.excerpt = excerpt;
    this.done = 0;
    this.head = { ...SHEET, id: drawId(), set: data.set, listener, made: new Date().toISOString(), excerpt_s: excerpt };
  }

  begin() {
    this.began = performance.now();
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
  constructor(data, choices) {
    super(data, choices);
    this.planned = choices.trials;
    this.pair = shuffle([...choices.chosen]);
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

  // What must be heard before a trial is answered: at first all three, later X.
  get needed() {
    return this.done === 0 ? [0, 1, 2] : [2];
  }

  get before() {
    return this.done === 0 ? "Listen to A, B and X, then answer." : "Listen to X, then answer.";
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

// Every chosen candidate with every other. Each is A as often as B, or once more or less where the number is odd.
class PreferenceRound extends Round {
  constructor(data, choices) {
    super(data, choices);
    this.candidates = choices.chosen;
    this.pairs = shuffle(balancedPairs(shuffle([...choices.chosen])));
    this.planned = this.pairs.length;
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

  get needed() {
    return [0, 1];
  }

  get before() {
    return "Listen to both, then answer.";
  }

  answer(choice) {
    const [first, second] = this.pairs[this.done].map((index) => this.candidates.indexOf(index));
    this.answered.push({ first, second, preferred: choice === null ? null : [first, second][choice] });
    this.done = this.answered.length;
    if (this.done < this.planned) this.begin();
  }

  get sheet() {
    return {
      ...this.head, test: "preference", candidates: this.candidates.map((index) => this.identity(index)),
      pairs: this.answered, finished: this.done === this.planned,
    };
  }
}

// All pairs of a ring: whoever is less than half-way round from another comes first; just half-way, a lot decides.
function balancedPairs(ring) {
  return ring.flatMap((one, place) => ring.slice(0, place).map((other, earlier) => {
    const ahead = 2 * (place - earlier) - ring.length;
    const isFirst = ahead === 0 ? drawLot(2) === 0 : ahead > 0;
    return isFirst ? [one, other] : [other, one];
  }));
}
