// The page itself: what is where, what the keys do, and what follows what.

const STILL = matchMedia("(prefers-reduced-motion: reduce)");
const FIELDS = "input[type=text], input[type=number], select";
const PRESSED_BY_SPACE = "button, summary, a, [type=checkbox], [name=kind]";
const MOVED_BY_ARROWS = "[type=radio], [type=range], .scrolled";
const STEP_S = 0.5;

class Page {
  constructor(data) {
    this.data = data;
    this.chosen = 0;
    this.sound = new Sound(data.sample_rate);
    this.length = Math.max(...data.candidates.map(({ frames }) => frames)) / data.sample_rate;
    this.showHeading();
    this.showCandidates();
    this.showLegend();
    this.showKeys();
    this.graph = new Graph(byId("graph"), data, this.sound, (what, value) => this.graphTells(what, value));
    this.transfers = [["target", "pitch"], ["gate", "control"]].map((pair) =>
      new Transfer(byId(`transfer-${pair[1] === "pitch" ? "pitch" : "gain"}`), data, this.graph, pair));
    new Figures(byId("figures-body"), data, (start, end) => this.showStretch(start, end));
    this.showZoom();
    this.listen();
    this.showPosition();
    requestAnimationFrame(() => this.tick());
  }

  async prepareSound() {
    const { candidates, sample_rate } = this.data;
    this.clips = await decodedClips(candidates.length, sample_rate, (number) => this.say(`Reading the sound of candidate ${number} of ${candidates.length}.`));
    this.sound.load(this.clips, this.length);
    this.blind = new BlindListening(byId("blind-body"), this.data, this.sound, this.clips, {
      enter: () => this.enterRound(), leave: () => this.leaveRound(), excerpt: () => this.loopStretch(),
    });
    byId("play").disabled = false;
    this.say("Ready.");
  }

  say(words) {
    byId("status").textContent = words;
  }

  // What stands on the page

  showHeading() {
    const { title, phrase, candidates, loudness, tolerance_cents, engine } = this.data;
    this.title = title;
    byId("title").replaceChildren(named(title));
    byId("subtitle").append("Phrase ", named(phrase.title), `, ${duration(phrase.length_s)}. ${counted(candidates.length, "candidate")} at ${fixed(loudness.common_lufs)} LUFS, in tune within ${Number(tolerance_cents)} cents.`);
    byId("length").textContent = clock(this.length);
    byId("imprint").textContent = `Made by Glidesmith ${engine}. Set ${this.data.set.slice(0, 12)}. Everything stays in this file: nothing is loaded and nothing is sent.`;
  }

  showCandidates() {
    const rows = this.data.candidates.map(({ label, gain_db }, index) => {
      const radio = element("input", { type: "radio", name: "candidate", value: index, checked: index === 0, change: () => this.choose(index) });
      const key = index < 9 ? element("kbd", {}, String(index + 1)) : element("span", { class: "number" }, String(index + 1));
      return element("label", { class: "candidate" }, radio, key, swatch(index), named(label), element("small", {}, `${signed(gain_db)} dB`));
    });
    byId("candidates").append(...rows);
    this.radios = rows.map((row) => row.querySelector("input"));
  }

  showLegend() {
    const part = (kind, words) => element("span", {}, drawn("svg", { class: "swatch", viewBox: "0 0 34 14", width: 34, height: 14 },
      kind === "band" ? drawn("rect", { x: 0, y: 3, width: 34, height: 8, class: kind }) : drawn("path", { d: "M0 7H34", class: kind })), words);
    byId("legend").append(part("target", "target of the chosen candidate"), part("band", `within ${Number(this.data.tolerance_cents)} cents`),
      part("gate", "its gate or envelope"), part("control", "its control after the slew"));
  }

  showZoom() {
    const { graph } = this;
    const span = () => graph.view.end - graph.view.start;
    const controls = [
      ["Closer", () => graph.zoom(1.6, graph.centre())], ["Wider", () => graph.zoom(1 / 1.6, graph.centre())],
      ["Earlier", () => graph.pan(-span() / 4)], ["Later", () => graph.pan(span() / 4)],
      ["Pitch closer", () => graph.zoomPitch(1.6)], ["Pitch wider", () => graph.zoomPitch(1 / 1.6)], ["Show all", () => graph.showAll()],
    ];
    byId("zoom").append(...controls.map(([words, click]) => element("button", { type: "button", click }, words)));
  }

  showKeys() {
    const keys = [
      [["1", "9"], "hear that candidate", " to "], [["\u2190", "\u2192"], "the candidate before, the next"],
      [["space"], "play, pause"], [["shift \u2190", "shift \u2192"], `${STEP_S} s back, on`], [["home"], "to the beginning, or the loop's"],
      [["l"], "loop on or off"], [["["], "begin the loop here"], [["]"], "end the loop here"],
      [["a", "b", "x"], "in a blind round: hear that clip"], [["1", "2", "0"], "in a blind round: answer"],
    ];
    byId("key-list").append(...keys.flatMap(([names, words, joint = " "]) => [
      element("dt", {}, ...names.flatMap((name, place) => [place ? joint : "", element("kbd", {}, name)])), element("dd", {}, words)]));
  }

  // Listening

  listen() {
    byId("play").addEventListener("click", () => this.toggle());
    byId("level").addEventListener("input", () => this.setLevel());
    byId("loop").addEventListener("change", () => this.applyLoop());
    for (const id of ["loop-start", "loop-end"]) byId(id).addEventListener("change", () => this.takeLoopFields());
    byId("loop-starts-here").addEventListener("click", () => this.moveLoop(0));
    byId("loop-ends-here").addEventListener("click", () => this.moveLoop(1));
    this.stretch = [0, this.length];
    this.showLoop();
    this.sound.addEventListener("change", (event) => this.soundTells(event.detail));
    addEventListener("keydown", (event) => this.key(event));
  }

  toggle() {
    if (this.sound.playing) this.sound.pause();
    else this.sound.play();
  }

  choose(index) {
    this.chosen = index;
    this.radios[index].checked = true;
    this.sound.choose(index);
  }

  setLevel() {
    const level = Number(byId("level").value);
    const words = level <= LOWEST_DB ? "silent" : decibels(level, 0);
    byId("level-text").textContent = words;
    byId("level").setAttribute("aria-valuetext", words);
    this.sound.setLevel(level);
  }

  // The stretch of the fields is kept while the loop is off.
  loopStretch() {
    return byId("loop").checked ? this.stretch : null;
  }

  applyLoop() {
    this.sound.setLoop(this.loopStretch());
  }

  setLoop(start, end) {
    const low = clamp(start, 0, this.length - SHORTEST_LOOP_S);
    this.stretch = [low, clamp(end, low + SHORTEST_LOOP_S, this.length)];
    byId("loop").checked = true;
    this.applyLoop();
    this.showLoop();
  }

  takeLoopFields() {
    const [start, end] = ["loop-start", "loop-end"].map((id) => Number(byId(id).value));
    if (Number.isFinite(start) && Number.isFinite(end) && start < end) this.setLoop(start, end);
    else this.showLoop();
  }

  moveLoop(side) {
    const { position } = this.sound;
    const [start, end] = this.stretch;
    if (side === 0) this.setLoop(position, end > position + SHORTEST_LOOP_S ? end : this.length);
    else this.setLoop(start < position - SHORTEST_LOOP_S ? start : 0, position);
  }

  showLoop() {
    byId("loop-start").value = this.stretch[0].toFixed(3);
    byId("loop-end").value = this.stretch[1].toFixed(3);
  }

  showStretch(start, end) {
    const margin = 0.15 * (end - start);
    this.graph.showStretch(Math.max(start - margin, 0), Math.min(end + margin, this.length));
    this.setLoop(start, end);
    byId("graph").focus({ preventScroll: true });
    byId("curves").scrollIntoView({ behavior: STILL.matches ? "auto" : "smooth", block: "start" });
    this.say(`Curves and loop: ${clock(start)} to ${clock(end)}.`);
  }

  // What follows what

  soundTells(what) {
    if (this.blind?.round) {
      this.blind.showPlaying();
      return;
    }
    const { label } = this.data.candidates[this.chosen];
    const name = `${this.chosen + 1}, ${label}`;
    byId("play").textContent = this.sound.playing ? "Pause" : "Play";
    if (what === "start") this.say(`Playing ${name}.`);
    if (what === "stop") this.say(`Paused at ${clock(this.sound.position)}.`);
    if (what === "choose") this.say(`${this.sound.playing ? "Playing" : "Chosen:"} ${name}.`);
    if (what === "choose") this.graph.changed();
    if (what === "loop" && this.graph.loopMark) this.graph.drawLoop();
    if (what === "loop") this.blind?.offerExcerpt();
    this.showPosition();
  }

  graphTells(what, value) {
    if (what === "view") for (const transfer of this.transfers ?? []) transfer.draw();
    if (what === "loop" && value[1] - value[0] >= SHORTEST_LOOP_S) this.setLoop(...value);
    if (what === "point") this.showReadout();
  }

  // Without motion the position moves twice a second, else with every frame.
  tick() {
    if (this.sound.playing && !this.blind?.round) {
      this.graph.follow(this.sound.position);
      this.showPosition();
    }
    if (STILL.matches) setTimeout(() => this.tick(), 500);
    else requestAnimationFrame(() => this.tick());
  }

  showPosition() {
    const { position } = this.sound;
    byId("position").textContent = clock(position);
    if (this.graph.pointedAt === null) this.showReadout();
    if (!this.graph.playMark) return;
    this.graph.drawPlay(position);
    for (const transfer of this.transfers) if (transfer.dot) transfer.drawDot(position);
  }

  showReadout() {
    const time = this.graph.pointedAt ?? this.sound.position;
    const { curves } = this.data.candidates[this.chosen];
    const places = this.data.candidates.map((candidate, index) => `${index + 1}: ${noteText(valueAt(candidate.curves.pitch, time))}`);
    byId("readout").textContent = `At ${clock(time)}: target ${noteText(valueAt(curves.target, time))}; pitch ${places.join(", ")}`;
  }

  // Rounds

  enterRound() {
    document.title = "Blind listening";
    this.showRest(false);
  }

  leaveRound() {
    document.title = this.title;
    this.showRest(true);
    this.sound.load(this.clips, this.length);
    this.applyLoop();
    this.choose(this.chosen);
    this.graph.changed();
  }

  showRest(shown) {
    for (const part of document.querySelectorAll(".open-only, .skip")) part.hidden = !shown;
  }

  // Keys

  key(event) {
    if (event.ctrlKey || event.altKey || event.metaKey || event.defaultPrevented) return;
    if (!byId("single-keys").checked || event.target.matches(FIELDS)) return;
    if (event.key === " " && event.target.closest(PRESSED_BY_SPACE)) return;
    const round = this.blind?.round;
    const taken = round ? !event.repeat && this.blind.key(event.key.toLowerCase()) : this.openKey(event);
    if (taken) event.preventDefault();
  }

  openKey(event) {
    const count = this.data.candidates.length;
    const step = { ArrowLeft: -1, ArrowRight: 1 }[event.key];
    const isTheirs = event.target.matches(MOVED_BY_ARROWS);
    if (/^[1-9]$/.test(event.key) && Number(event.key) <= count) this.choose(Number(event.key) - 1);
    else if (step && event.shiftKey) this.sound.seek(this.sound.position + step * STEP_S);
    else if (step && !isTheirs) this.choose((this.chosen + step + count) % count);
    else if (event.key === " " && this.clips) this.toggle();
    else if (event.key === "Home" && !isTheirs) this.sound.seek(this.loopStretch()?.[0] ?? 0);
    else if (event.key === "l") this.toggleLoop();
    else if (event.key === "[") this.moveLoop(0);
    else if (event.key === "]") this.moveLoop(1);
    else return false;
    return true;
  }

  toggleLoop() {
    byId("loop").checked = !byId("loop").checked;
    this.applyLoop();
    this.say(byId("loop").checked ? `Loop on: ${clock(this.stretch[0])} to ${clock(this.stretch[1])}.` : "Loop off.");
  }
}

const page = new Page(JSON.parse(byId("data").textContent));
page.prepareSound().catch((problem) => page.say(`The sound can't be read here (${problem.message}). The WAV files beside this page hold it too.`));
