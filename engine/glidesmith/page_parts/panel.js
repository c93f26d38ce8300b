// The panel: what the engine's state is, what is where on the page, and what the keys do.

const FIELDS = "input[type=text], input[type=number], select, textarea";
const PRESSED_BY_SPACE = "button, summary, a, [type=checkbox]";
const AHEAD_MS = 350;
const STILL = matchMedia("(prefers-reduced-motion: reduce)");
const TEMPO = new Scale({ low: 10, high: 400, logarithmic: true });
const STILL_MS = 250;
const KEPT_WAYS = 31;

// What the engine has told, and how far the person is ahead of it.
class Model {
  constructor() {
    this.state = null;
    this.keys = new Map();
    this.curves = null;
    this.loaded = new Map();
    this.ahead = new Map();
    this.sent = new Map();
    this.caughtUp = () => {};
  }

  get slots() {
    return this.state?.slots ?? [];
  }

  get current() {
    return this.state?.current ?? 1;
  }

  get slot() {
    return this.slots.find(({ number }) => number === this.current);
  }

  get loop() {
    return this.state?.phrase?.loop_s || this.curves?.target.at(-1)[0] || 1;
  }

  get tolerance() {
    return this.facts?.tolerance_cents ?? 5;
  }

  // Octaves from C4 of what a slot calls 0 V.
  shiftOf(number) {
    const slot = this.slots.find((one) => one.number === number) ?? this.slot;
    const note = noteNumber(slot?.settings["tuning.zero_volts"] ?? "C4") ?? MIDDLE_C;
    return (note - MIDDLE_C) / 12;
  }

  merge({ state, change }) {
    if (state) this.state = state;
    else {
      const known = new Map([...this.slots, ...(change.slots ?? [])].map((slot) => [slot.number, slot]));
      const numbers = change.slot_numbers ?? this.slots.map(({ number }) => number);
      this.state = { ...this.state, ...change, slots: numbers.map((number) => known.get(number)) };
    }
    for (const slot of this.slots) if (!slot.changed) this.loaded.set(slot.number, slot.settings);
  }

  // A setting was moved here: until the engine has followed, the page's own value stands.
  moved(id, name) {
    this.ahead.set(name, performance.now() + AHEAD_MS);
    setTimeout(() => this.caughtUp(), AHEAD_MS + 10);
    this.named(id, name);
  }

  // Which setting a message was about, for the case that it is refused.
  named(id, name) {
    this.sent.set(id, name);
    if (this.sent.size > 400) this.sent.delete(this.sent.keys().next().value);
  }

  isAhead(name) {
    return (this.ahead.get(name) ?? 0) > performance.now();
  }
}

// A candidate goes by its own name, a preset by its title.
function nameOf(slot) {
  return slot?.name || slot?.title || "Glidesmith";
}

class PanelPage {
  constructor() {
    this.token = new URLSearchParams(location.search).get("token") ?? "";
    this.model = new Model();
    this.link = new Link(this.token);
    this.trace = new Trace(48000);
    this.graph = new Graph(byId("graph"), this.model, this.trace);
    this.transfers = [["target", "pitch"], ["gate", "control"]].map((pair) =>
      new Transfer(byId(`transfer-${pair[1] === "pitch" ? "pitch" : "gain"}`), this.model, this.trace, pair));
    this.settings = new Settings(byId("settings-body"), this.model, this.link);
    this.slots = new Slots(this.model, this.link);
    this.facts = new Facts(byId("facts-body"), this.model);
    this.notes = new Notes(this.model, this.link);
    this.meters = new Meters(byId("meters"));
    this.files = new Files(this.model, this.link);
    this.showLegend();
    this.showSpans();
    this.showKeys();
    this.model.caughtUp = () => this.showMoved();
    this.listenToLink();
    this.listenToPage();
    requestAnimationFrame(() => this.tick());
  }

  // What the engine tells

  listenToLink() {
    const on = (name, act) => this.link.addEventListener(name, ({ detail }) => act(detail));
    on("open", () => this.say("Connected."));
    on("closed", () => this.lost());
    on("hello", ({ hello }) => this.meet(hello));
    on("state", (message) => this.changed(message));
    on("change", (message) => this.changed(message));
    on("figures", ({ figures }) => this.showFigures(figures));
    on("files", ({ files }) => this.files.setFiles(files));
    on("refused", (message) => this.refused(message));
    on("done", ({ done, facts }) => this.done(done, facts));
    on("taken", (message) => this.taken(message));
    on("report", ({ report }) => this.showReport(report));
    on("listener", ({ listener }) => this.setListener(listener));
    on("trace", (frame) => {
      this.trace.take(frame);
      this.meters.show(frame.meters, this.model.state?.ceiling_db ?? 0);
    });
  }

  meet(hello) {
    this.hello = hello;
    this.model.guest = hello.guest;
    document.body.classList.remove("lost");
    this.model.keys = new Map(hello.keys.map((key) => [key.name, key]));
    if (!this.settings.keys) this.settings.build(hello.keys, hello.tables);
    this.trace.rate = hello.sample_rate;
    setText(byId("folder"), hello.folders[0] ?? "");
    setText(byId("imprint"), `Glidesmith ${hello.version}, served to this machine alone.`);
    this.link.ask({ do: "files" });
    byId("listen-row").hidden = !hello.browser_sound;
    if (hello.browser_sound && !this.sound) this.sound = new BrowserSound(this.link, this.trace, hello.sample_rate, this.token);
    this.setListener(hello.listener);
    if (this.sound?.wanted && hello.listener === null) this.link.ask({ do: "listen", on: true });
  }

  lost() {
    if (!document.body.classList.contains("lost")) this.say("The engine is not reached; trying again. Where it was started anew, open the address that it printed.");
    document.body.classList.add("lost");
    this.notes.forget();
    this.sound?.rest();
  }

  changed(message) {
    const before = this.model.state;
    this.model.merge(message);
    this.show(before);
  }

  show(before) {
    const { model } = this;
    const { state, slot } = model;
    const sameSlot = before?.current === state.current;
    this.settings.show();
    this.slots.show();
    this.files.show();
    const name = nameOf(slot);
    document.title = `${name}, live`;
    byId("title").replaceChildren(named(name));
    setText(byId("subtitle"), `Slot ${state.current}, phrase ${state.phrase?.title ?? ""}, ${duration(model.loop)}.`);
    setText(byId("settings-heading"), `Settings of slot ${state.current}`);
    setText(byId("length"), `${model.loop.toFixed(2)} s`);
    this.showTransport(state);
    this.showWarnings(state.warnings ?? []);
    if (before && !sameSlot) this.say(`Slot ${state.current} is heard: ${name}.`);
    if (before && before.playing !== state.playing) this.say(state.playing === "stopped" ? "Stopped." : "Playing.");
    if (before && Boolean(before.capture) !== Boolean(state.capture)) this.sayCapture(state.capture);
    this.graph.redraw();
  }

  // What has no effect stands beside the settings already.
  showWarnings(lines) {
    const told = lines.filter((line) => !line.includes("has no effect with"));
    if (told.join() === this.warned) return;
    this.warned = told.join();
    byId("warnings").replaceChildren(...told.map((line) => element("li", {}, named(line))));
  }

  // Whoever ended it was told more than this already.
  sayCapture(capture) {
    if (capture) this.say("Capture started.");
    else if (performance.now() > (this.capturedAt ?? 0) + 1000) this.say("Capture ended.");
  }

  showTransport(state) {
    setText(byId("play"), state.playing === "phrase" ? "Stop" : "Play");
    for (const name of ["loop", "match"]) if (!this.model.isAhead(name)) byId(name).checked = state[name];
    byId("undo").disabled = !state.undo;
    byId("redo").disabled = !state.redo;
    if (!this.model.isAhead("level")) this.showLevel(state.level_db);
    if (!this.model.isAhead("tempo")) this.showTempo(state.tempo_percent);
    if (!this.model.isAhead("transpose") && document.activeElement !== byId("transpose")) byId("transpose").value = state.transpose;
    setText(byId("ceiling"), `A limiter keeps every peak under ${fixed(state.ceiling_db, 0)} dBFS.`);
  }

  // What was moved here has been followed by now: the engine's word stands again.
  showMoved() {
    if (!this.model.state) return;
    this.settings.show();
    this.showTransport(this.model.state);
  }

  showLevel(level) {
    byId("level").value = level;
    const words = `${fixed(level)} dBFS`;
    setText(byId("level-text"), words);
    byId("level").setAttribute("aria-valuetext", words);
  }

  showTempo(percent) {
    byId("tempo").value = Math.round(TEMPO.place(percent));
    byId("tempo").setAttribute("aria-valuetext", `${percent} %`);
    if (document.activeElement !== byId("tempo-text")) byId("tempo-text").value = `${percent} %`;
    const bpm = this.model.state.tempo_bpm;
    setText(byId("tempo-bpm"), bpm ? `${Number(bpm.toPrecision(4))} beats a minute` : "");
    this.tempo = percent;
  }

  showFigures({ slot, facts, curves, problem }) {
    if (problem) {
      this.tellProblem(problem);
      return;
    }
    if (slot !== this.model.current) return;
    this.model.curves = curves;
    this.model.facts = facts;
    this.facts.show(slot, facts);
    this.graph.redraw();
  }

  refused({ refused, id, key }) {
    const name = key ?? this.model.sent.get(id);
    this.model.ahead.delete(name);
    if (!name || !this.settings.problem(name, refused)) this.tellProblem(refused);
    if (this.model.state) this.settings.show();
  }

  done(what, facts) {
    const words = { save: "Saved.", load: "Loaded.", phrase: "The phrase has changed.", capture: "", capture_stop: "" }[what];
    if (words) this.say(words);
    if (what === "capture_stop") this.capturedAt = performance.now();
    if (what === "capture_stop" && facts) this.say(`Captured ${facts.path ?? ""}, ${duration(facts.seconds ?? 0)}.`);
    if (["save", "capture_stop"].includes(what)) this.link.ask({ do: "files" });
    byId("save-replace").checked = byId("capture-replace").checked = false;
  }

  // From what the person did to the first sample made with it: the median of the last moves.
  taken({ taken, made_ms }) {
    const at = this.link.sentAt.get(taken);
    if (at === undefined) return;
    this.link.sentAt.delete(taken);
    this.ways = [...(this.ways ?? []), Math.max(made_ms - at, 0)].slice(-KEPT_WAYS);
    const median = [...this.ways].sort((one, other) => one - other)[this.ways.length >> 1];
    setText(byId("way"), `A move is in the sound ${duration(median / 1000)} after it was made.`);
  }

  showReport({ device, sample_rate, block, latency_s, underflows, callback_p999_us, deadline_us }) {
    if (!this.sound) this.trace.latency = latency_s ?? 0;
    if (!device) return;
    const late = latency_s ? `, ${duration(latency_s)} to the output` : "";
    const dropped = `${underflows ? counted(underflows, "dropout") : "no dropout"} so far`;
    if (this.sound) setText(byId("device"), `Through the browser at ${sample_rate} Hz${late}; ${dropped}.`);
    else setText(byId("device"), `${device} at ${sample_rate} Hz, ${block} frames a block${late}; ${dropped}; a block takes at most ${Math.round(callback_p999_us)} of its ${Math.round(deadline_us)} µs.`);
  }

  setListener(listener) {
    if (!this.sound) return;
    this.sound.setListener(listener === this.hello.guest);
    const me = this.sound.isListener;
    setText(byId("listen"), me ? "Stop listening" : listener === null ? "Listen here" : "Listen here instead");
    byId("listen").classList.toggle("main", !me);
    this.listener = listener;
    setText(byId("listen-text"), me ? "The sound comes through this page." : listener === null
      ? "No sound card is in use: the sound comes through the browser, once you say so." : "Another panel has the sound; this one shows what is heard there.");
  }

  // What the person does

  listenToPage() {
    const { link } = this;
    const click = (id, act) => byId(id).addEventListener("click", act);
    click("play", (event) => this.play(event));
    // A key that is held on a button presses it once.
    addEventListener("keydown", (event) => event.repeat && event.key === "Enter" && event.target.closest?.("button") && event.preventDefault(), true);
    click("panic", (event) => this.panic(event));
    click("undo", (event) => link.send({ do: "undo" }, event));
    click("redo", (event) => link.send({ do: "redo" }, event));
    click("listen", () => this.listenHere());
    for (const name of ["loop", "match"]) byId(name).addEventListener("change", (event) => this.model.moved(link.send({ do: name, on: byId(name).checked }, event), name));
    byId("level").addEventListener("input", (event) => this.setLevel(Number(byId("level").value), event));
    byId("tempo").addEventListener("input", (event) => this.setTempo(TEMPO.value(Number(byId("tempo").value)), event));
    byId("tempo").addEventListener("keydown", (event) => this.stepTempo(event));
    byId("tempo-text").addEventListener("change", (event) => this.takeTempo(event));
    byId("transpose").addEventListener("input", (event) => this.setTransposition(event));
    addEventListener("keydown", (event) => this.key(event));
    addEventListener("keyup", (event) => this.notes.keyUp(event));
    // A button that was clicked must not catch the space bar afterwards: that plays and stops.
    addEventListener("click", (event) => event.detail > 0 && event.target.closest?.("button")?.blur());
  }

  play(event) {
    this.clearProblem();
    this.notes.forget(); // the engine lets held keys go
    this.link.send({ do: this.model.state?.playing === "phrase" ? "stop" : "play" }, event);
  }

  panic(event) {
    this.notes.forget();
    this.link.send({ do: "panic" }, event);
    this.say("Silence.");
  }

  async listenHere() {
    if (this.sound.isListener) {
      this.sound.stop();
      return;
    }
    try {
      await this.sound.start(this.listener !== null && this.listener !== this.hello.guest);
    } catch (problem) {
      this.tellProblem(`The sound can't be played here: ${problem.message}.`);
    }
  }

  setLevel(level, event) {
    this.model.moved(this.link.send({ do: "level", db: level }, event), "level");
    this.showLevel(level);
  }

  setTempo(percent, event) {
    this.model.moved(this.link.send({ do: "tempo", percent }, event), "tempo");
    this.showTempo(percent);
  }

  stepTempo(event) {
    const places = placesOf(event);
    if (places === null) return;
    event.preventDefault();
    this.setTempo(Math.abs(places) === STEPS ? TEMPO.value(places > 0 ? STEPS : 0) : TEMPO.moved(this.tempo, places), event);
  }

  takeTempo(event) {
    const percent = Number(byId("tempo-text").value.replace("%", "").replace(",", ".").trim());
    if (percent >= 10 && percent <= 400) this.setTempo(percent, event);
    else this.tellProblem("Tempo: 10 to 400 % of the phrase’s own.");
    byId("tempo-text").value = `${this.tempo} %`;
  }

  setTransposition(event) {
    const semitones = Number(byId("transpose").value);
    if (Number.isInteger(semitones) && Math.abs(semitones) <= 24) this.model.moved(this.link.send({ do: "transpose", semitones }, event), "transpose");
  }

  // Keys

  key(event) {
    if (event.defaultPrevented || event.isComposing) return;
    const isField = event.target.matches?.(FIELDS) ?? false;
    if ((event.ctrlKey || event.metaKey) && !event.altKey) {
      if (!isField && this.undoKey(event)) event.preventDefault();
      return;
    }
    if (event.key === "Escape" && !event.repeat) this.panic(event);
    if (event.altKey || isField || !byId("single-keys").checked) return;
    if (event.key === " " && event.target.closest?.(PRESSED_BY_SPACE)) return;
    if (this.singleKey(event)) event.preventDefault();
  }

  undoKey(event) {
    const key = event.key.toLowerCase();
    const doing = key === "z" ? (event.shiftKey ? "redo" : "undo") : key === "y" ? "redo" : null;
    if (doing) this.link.send({ do: doing }, event);
    return doing !== null;
  }

  singleKey(event) {
    const digit = /^Digit([1-8])$/.exec(event.code);
    const doing = digit ? () => this.slots.select(Number(digit[1]), event, event.shiftKey ? "loop" : undefined)
      : event.key === " " ? () => this.play(event)
      : event.code === "KeyB" ? () => byId("loop").click()
      : event.code === "KeyC" ? () => byId("capture").click() : null;
    if (!doing) return this.notes.keyDown(event);
    if (!event.repeat) doing();
    return true;
  }

  // Drawing

  // Without motion the curves are drawn four times a second, else with every frame.
  tick() {
    const heard = this.trace.heard();
    const now = this.trace.at(heard);
    this.graph.draw(heard, now);
    for (const transfer of this.transfers) transfer.draw(heard, now);
    this.showPosition(now);
    if (STILL.matches) setTimeout(() => this.tick(), STILL_MS);
    else requestAnimationFrame(() => this.tick());
  }

  showPosition(now) {
    const time = performance.now();
    if (!now || time < (this.nextText ?? 0)) return;
    this.nextText = time + 100;
    setText(byId("position"), `${now.position.toFixed(2)} s`);
    const shift = this.model.shiftOf(now.slot);
    setText(byId("readout"), `Target ${noteText(now.target + shift)}, pitch ${noteText(now.pitch + shift)}, gate ${now.gate.toFixed(2)}, control ${now.control.toFixed(2)}, gain ${now.gain.toFixed(3)}`);
  }

  showLegend() {
    const part = (kind, words) => element("span", {}, drawn("svg", { class: "swatch", viewBox: "0 0 34 14", width: 34, height: 14, "aria-hidden": "true" },
      kind === "band" ? drawn("rect", { x: 0, y: 3, width: 34, height: 8, class: kind }) : drawn("path", { d: "M0 7H34", class: kind })), words);
    byId("legend").append(part("target", "target"), part("band", "in tune"), part("line chosen played", "played in this pass"), part("line foreseen", "the whole loop, as set"), part("gate", "gate or envelope"));
  }

  showSpans() {
    byId("span").append(...SPANS.map(([words, seconds]) => element("label", { class: "segment" },
      element("input", { type: "radio", name: "span", value: seconds, checked: seconds === 0, change: () => this.graph.showSpan(seconds) }), element("span", {}, words))));
  }

  showKeys() {
    const keys = [
      [["space"], "play, stop"], [["esc"], "silence, at once, from everywhere on the page"], [["1", "8"], "hear that slot; with shift, from the loop’s start", " to "],
      [["b"], "loop on or off"], [["c"], "start or stop the capture"], [["ctrl z"], "undo"], [["ctrl shift z"], "redo"],
      [["a", ";"], "the lower row of notes, by place; the row above it, w to p, lies between", " to "], [[",", "."], "an octave lower, higher"],
      [["\u2191", "\u2193"], "on a setting: up, down; with shift finely"], [["page up", "page down"], "on a setting: in large steps"],
    ];
    byId("key-list").append(...keys.flatMap(([names, words, joint = " "]) => [
      element("dt", {}, ...names.flatMap((name, place) => [place ? joint : "", element("kbd", {}, name)])), element("dd", {}, words)]));
  }

  say(words) {
    setText(byId("status"), words);
  }

  tellProblem(line) {
    setText(byId("problem"), line);
    clearTimeout(this.problemTimer);
    this.problemTimer = setTimeout(() => this.clearProblem(), 12000);
  }

  clearProblem() {
    setText(byId("problem"), "");
  }
}

new PanelPage();
