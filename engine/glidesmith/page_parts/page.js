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
    this.bar = new Bar(this);
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
    for (const id of ["play", "bar-play"]) byId(id).disabled = false;
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
      return element("label", { class: "candidate" }, radio, key, swatch(index), named(label), element("small", {}, matchedBy(gain_db)));
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
    ["loop-start", "loop-end"].forEach((id, side) => byId(id).addEventListener("change", () => this.takeLoopField(side)));
    byId("single-keys").addEventListener("change", () => this.showKeyCaps());
    byId("loop-starts-here").addEventListener("click", () => this.placeLoop(0, this.sound.position));
    byId("loop-ends-here").addEventListener("click", () => this.placeLoop(1, this.sound.position));
    this.stretch = [0, this.length];
    this.showLoop();
    this.sound.addEventListener("change", (event) => this.soundTells(event.detail));
    addEventListener("keydown", (event) => this.key(event));
  }

  toggle() {
    if (this.sound.wanted) this.sound.pause();
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

  // Keys that do nothing are not shown beside what they would do.
  showKeyCaps() {
    document.body.classList.toggle("no-single-keys", !byId("single-keys").checked);
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

  takeLoopField(side) {
    const text = byId(["loop-start", "loop-end"][side]).value;
    if (text === "") this.refuseLoop("Give a time in seconds");
    else this.placeLoop(side, clamp(Number(text), 0, this.length), Number(text) > this.length ? ` The sound ends at ${clock(this.length)}.` : "");
  }

  // Begins the loop at a time (side 0) or ends it there (1). Where the loop's other end is in the way, that goes to
  // the sound's own. What is refused leaves the loop as it was, and what is changed is said.
  placeLoop(side, time, more = "") {
    const [start, end] = this.stretch;
    const least = `a loop lasts at least ${duration(SHORTEST_LOOP_S)}`;
    if ((side === 0 ? this.length - time : time) < SHORTEST_LOOP_S) {
      this.refuseLoop(`No loop can ${side === 0 ? "begin" : "end"} at ${clock(time)}: ${least}.${more}`);
      return;
    }
    const fits = (side === 0 ? end - time : time - start) >= SHORTEST_LOOP_S - 1e-9;
    if (side === 0) this.setLoop(time, fits ? end : this.length);
    else this.setLoop(fits ? start : 0, time);
    const moved = side === 0 ? `Its end went to the end of the sound: ${least}.` : `Its start went to the beginning: ${least}.`;
    this.say(`Loop: ${this.loopWords()}.${more}${fits ? "" : ` ${moved}`}`);
  }

  refuseLoop(words) {
    this.say(`${words.replace(/\.$/, "")}. The loop stays at ${this.loopWords()}.`);
    this.showLoop();
  }

  loopWords() {
    return this.stretch.map(clock).join(" to ");
  }

  showLoop() {
    byId("loop-start").value = this.stretch[0].toFixed(3);
    byId("loop-end").value = this.stretch[1].toFixed(3);
  }

  showStretch(start, end) {
    const margin = 0.15 * (end - start);
    this.graph.showStretch(Math.max(start - margin, 0), Math.min(end + margin, this.length));
    this.setLoop(start, end);
    this.sound.seek(start);
    byId("graph").focus({ preventScroll: true });
    byId("curves").scrollIntoView({ behavior: STILL.matches ? "auto" : "smooth", block: "start" });
    this.say(`Curves and loop: ${this.loopWords()}.`);
  }

  // What follows what

  soundTells(what) {
    if (this.blind?.round) {
      this.blind.soundTells(what);
      return;
    }
    const { label } = this.data.candidates[this.chosen];
    const name = `${this.chosen + 1}, ${label}`;
    for (const id of ["play", "bar-play"]) byId(id).textContent = this.sound.wanted ? "Pause" : "Play";
    if (what === "start") this.say(`Playing ${name}.`);
    if (what === "stop") this.say(`Paused at ${clock(this.sound.position)}.`);
    if (what === "end") this.say("Played to the end; Play starts from the beginning.");
    if (what === "choose") this.say(`${this.sound.playing ? "Playing" : "Chosen:"} ${name}.`);
    if (what === "choose") this.bar.show();
    if (what === "choose") this.graph.changed();
    if (what === "loop" && this.graph.loopMark) this.graph.drawLoop();
    if (what === "loop") this.blind?.setup.takeExcerpt();
    this.showPosition();
  }

  graphTells(what, value) {
    if (what === "view") for (const transfer of this.transfers ?? []) transfer.draw();
    if (what === "loop") this.takeDraggedLoop(value);
    if (what === "point") this.showReadout();
  }

  takeDraggedLoop([start, end]) {
    if (end - start < SHORTEST_LOOP_S) this.refuseLoop(`That is too short: a loop lasts at least ${duration(SHORTEST_LOOP_S)}`);
    else {
      this.setLoop(start, end);
      this.say(`Loop: ${this.loopWords()}.`);
    }
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
    for (const id of ["position", "bar-position"]) byId(id).textContent = clock(position);
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
    this.bar.follow();
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
    else if (event.key === "[") this.placeLoop(0, this.sound.position);
    else if (event.key === "]") this.placeLoop(1, this.sound.position);
    else return false;
    return true;
  }

  toggleLoop() {
    byId("loop").checked = !byId("loop").checked;
    this.applyLoop();
    this.say(byId("loop").checked ? `Loop on: ${this.loopWords()}.` : "Loop off.");
  }
}

// What the gain that brought a candidate to the common loudness did to it.
function matchedBy(gain_db) {
  const size = fixed(Math.abs(gain_db));
  return Number(size) === 0 ? "matches as it is" : `made ${size} dB ${gain_db > 0 ? "louder" : "quieter"} to match`;
}

const page = new Page(JSON.parse(byId("data").textContent));
page.prepareSound().catch((problem) => page.say(`The sound can't be read here (${problem.message}). The WAV files beside this page hold it too.`));
