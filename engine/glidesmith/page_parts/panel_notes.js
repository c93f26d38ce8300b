// Notes from the computer keyboard and from buttons: two rows of whole tones, a semitone apart.
//
// Every interval has one shape of the hand wherever it is played, so that the same glide can be felt from note to
// note. Keys go by their place on the keyboard, whatever is printed on them.

const LOWER_ROW = ["KeyA", "KeyS", "KeyD", "KeyF", "KeyG", "KeyH", "KeyJ", "KeyK", "KeyL", "Semicolon"];
const UPPER_ROW = ["KeyW", "KeyE", "KeyR", "KeyT", "KeyY", "KeyU", "KeyI", "KeyO", "KeyP"];
const OCTAVE_KEYS = { Comma: -12, Period: 12 };
const FIRST_NOTE = 48;
const LAST_FIRST = 108;
const PRINTED = { Semicolon: ";", Comma: ",", Period: "." };
const STEP_OF = new Map([...LOWER_ROW.map((code, place) => [code, 2 * place]), ...UPPER_ROW.map((code, place) => [code, 2 * place + 1])]);

class Notes {
  constructor(model, link) {
    this.model = model;
    this.link = link;
    this.first = FIRST_NOTE;
    this.sounding = new Map(); // by what holds it, a key's place or a pointer: the note
    this.buttons = new Map();
    this.printed = (code) => PRINTED[code] ?? code.replace(/^Key|^Digit/, "");
    byId("octave-down").addEventListener("click", () => this.shift(-12));
    byId("octave-up").addEventListener("click", () => this.shift(12));
    byId("velocity").addEventListener("input", () => setText(byId("velocity-text"), Number(byId("velocity").value).toFixed(2)));
    addEventListener("blur", () => this.releaseAll());
    document.addEventListener("visibilitychange", () => document.hidden && this.releaseAll());
    this.build();
    this.readPrint();
  }

  // What is printed on the keys of this keyboard, where the browser tells.
  async readPrint() {
    try {
      const map = await navigator.keyboard.getLayoutMap();
      this.printed = (code) => (map.get(code) ?? PRINTED[code] ?? code.replace(/^Key|^Digit/, "")).toUpperCase();
      this.showNames();
    } catch {
      // it does not: the common places stand there
    }
  }

  build() {
    const row = (codes, kind) => element("div", { class: `note-row ${kind}` }, ...codes.map((code) => this.button(code)));
    byId("note-rows").append(row(UPPER_ROW, "upper"), row(LOWER_ROW, "lower"));
    this.showNames();
  }

  button(code) {
    const name = element("span", { class: "note-name" });
    const key = element("kbd", {});
    const button = element("button", { type: "button", class: "note-button", "aria-pressed": "false",
      pointerdown: (event) => this.press(event, code, button), keydown: (event) => this.holdByKey(event, code),
      keyup: (event) => this.liftByKey(event), blur: () => this.up(`button ${code}`) }, name, key);
    for (const end of ["pointerup", "pointercancel", "lostpointercapture"]) button.addEventListener(end, (event) => this.up(`pointer ${event.pointerId}`));
    this.buttons.set(code, { button, name, key });
    return button;
  }

  showNames() {
    for (const [code, { button, name, key }] of this.buttons) {
      const note = this.first + STEP_OF.get(code);
      setText(name, note <= 127 ? noteText((note - MIDDLE_C) / 12) : "");
      setText(key, this.printed(code));
      button.disabled = note > 127;
    }
    setText(byId("key-down"), this.printed("Comma"));
    setText(byId("key-up"), this.printed("Period"));
    setText(byId("note-state"), `from ${noteText((this.first - MIDDLE_C) / 12)} on`);
  }

  shift(semitones) {
    this.releaseAll();
    this.first = clamp(this.first + semitones, 0, LAST_FIRST);
    this.showNames();
  }

  press(event, code, button) {
    if (event.button !== 0) return;
    button.setPointerCapture(event.pointerId);
    this.down(`pointer ${event.pointerId}`, this.first + STEP_OF.get(code), event);
  }

  holdByKey(event, code) {
    if (event.key !== "Enter" && event.key !== " ") return;
    event.preventDefault();
    if (!event.repeat) this.down(`button ${code}`, this.first + STEP_OF.get(code), event);
  }

  liftByKey(event) {
    if (event.key !== "Enter" && event.key !== " ") return;
    for (const code of this.buttons.keys()) this.up(`button ${code}`, event);
  }

  // From the page's own listeners: true where the key is one of ours.
  keyDown(event) {
    if (event.code in OCTAVE_KEYS) {
      if (!event.repeat) this.shift(OCTAVE_KEYS[event.code]);
      return true;
    }
    if (!STEP_OF.has(event.code)) return false;
    if (!event.repeat) this.down(event.code, this.first + STEP_OF.get(event.code), event);
    return true;
  }

  keyUp(event) {
    this.up(event.code, event);
  }

  down(holder, note, event) {
    if (note > 127 || this.sounding.has(holder)) return;
    const already = [...this.sounding.values()].includes(note);
    this.sounding.set(holder, note);
    if (!already) this.link.send({ do: "key_down", note, velocity: Number(byId("velocity").value) }, event);
    this.mark();
  }

  up(holder, event) {
    const note = this.sounding.get(holder);
    if (note === undefined) return;
    this.sounding.delete(holder);
    if (![...this.sounding.values()].includes(note)) this.link.send({ do: "key_up", note }, event);
    this.mark();
  }

  releaseAll() {
    for (const holder of [...this.sounding.keys()]) this.up(holder);
  }

  // The engine has let the keys go by itself: the link was lost, or the transport took over.
  forget() {
    this.sounding.clear();
    this.mark();
  }

  mark() {
    const held = new Set(this.sounding.values());
    for (const [code, { button }] of this.buttons) button.setAttribute("aria-pressed", String(held.has(this.first + STEP_OF.get(code))));
  }
}
