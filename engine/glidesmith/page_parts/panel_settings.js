// The settings of the slot that is heard: a slider and a field for each number, a choice for each word.

const IDLE = "no effect now";
const GESTURES_OF_A_PANEL = 1e6;
const GROUP_ORDER = ["pitch", "gain", "envelope", "amplifier", "oscillator", "tuning", "converter", "drone"];
const HIDDEN_TABLES = ["phrase", ""];
const LAW_KEYS = ["pitch.law", "gain.law"];

class Settings {
  constructor(body, model, link) {
    this.body = body;
    this.model = model;
    this.link = link;
    this.gesture = null; // while a slider is dragged: all of it is one step of undo
    this.gestures = 0;
    this.fields = new Map();
  }

  // The keys come with the engine's first words; the page knows none by itself.
  build(keys, tables) {
    this.keys = new Map(keys.map((key) => [key.name, key]));
    this.fields.clear();
    this.body.replaceChildren(
      ...tables.filter(({ name }) => !HIDDEN_TABLES.includes(name))
        .sort((one, other) => placeOfGroup(one) - placeOfGroup(other))
        .map((table) => this.group(table, keys.filter(({ name }) => name.startsWith(`${table.name}.`)))),
    );
  }

  group(table, keys) {
    const heading = element("h3", { id: `table-${table.name}` }, table.name);
    const head = element("div", { class: "group-head" }, heading, element("small", {}, table.description));
    const rows = keys.map((key) => this.field(key));
    const body = element("div", { class: "group-body" }, ...rows);
    if (table.presence === "optional") {
      const tick = element("input", { type: "checkbox", "aria-labelledby": `table-${table.name}`,
        change: (event) => this.turn(table.name, tick.checked, event) });
      heading.prepend(element("label", { class: "tick on" }, tick, element("span", { class: "unseen" }, "on")));
      this.fields.set(table.name, { show: (settings) => {
        const on = keys.some(({ name }) => name in settings);
        tick.checked = on;
        body.hidden = !on;
      } });
    }
    return element("div", { class: "group", role: "group", "aria-labelledby": `table-${table.name}` }, head, body);
  }

  field(key) {
    const made = LAW_KEYS.includes(key.name) ? this.lawField(key) : this.fieldOfKind(key);
    made.note = element("small", { class: "note", id: `note-${key.name}` });
    made.idle = element("small", { class: "idle-mark" });
    made.parts[0].append(made.idle);
    const row = element("div", { class: `setting ${made.kind}`, "data-key": key.name }, ...made.parts, this.resetButton(key, made), made.note);
    row.addEventListener("focusin", () => this.tellAbout(key));
    row.addEventListener("pointerenter", () => this.tellAbout(key));
    made.row = row;
    made.show = (settings, slot) => this.showField(key, made, settings, slot);
    this.fields.set(key.name, made);
    return row;
  }

  fieldOfKind(key) {
    if (key.kind === "choice") return this.choiceField(key);
    if (key.kind === "flag") return this.flagField(key);
    if (key.kind === "note" || key.kind === "file") return this.textField(key);
    return this.numberField(key);
  }

  // Numbers

  numberField(key) {
    const scale = scaleOf(key);
    const id = `set-${key.name}`;
    const slider = element("input", { type: "range", id, min: 0, max: STEPS, step: 1, "aria-describedby": `note-${key.name}` });
    const field = element("input", { type: "text", class: "value", inputmode: "decimal", autocomplete: "off", spellcheck: "false",
      "aria-label": `${this.title(key)}, typed`, "aria-describedby": `note-${key.name}` });
    const made = { kind: "number", slider, field, value: 0, parts: [this.label(key, id), slider, field] };
    slider.addEventListener("pointerdown", () => this.beginGesture());
    for (const end of ["pointerup", "pointercancel"]) slider.addEventListener(end, () => { this.gesture = null; });
    slider.addEventListener("input", (event) => this.setNumber(key, made, scale.value(Number(slider.value)), event));
    for (const part of [slider, field]) part.addEventListener("keydown", (event) => this.stepBy(event, key, made, scale));
    field.addEventListener("input", () => { made.typing = true; }); // from now on the engine leaves the text alone
    field.addEventListener("change", (event) => this.take(key, made, event));
    made.put = (value) => {
      made.value = value;
      this.showNumber(key, made, scale, value);
    };
    return made;
  }

  stepBy(event, key, made, scale) {
    const places = placesOf(event);
    const isField = event.target === made.field;
    if (places === null || (isField && !/^(Arrow(Up|Down)|Page)/.test(event.key))) return;
    event.preventDefault();
    const value = Math.abs(places) === STEPS ? scale.value(places > 0 ? STEPS : 0) : scale.moved(made.value, places);
    made.typing = false;
    this.setNumber(key, made, value, event);
  }

  // The page goes ahead of the engine, so that what is moved never jumps back under the hand.
  setNumber(key, made, value, event) {
    made.put(value);
    this.model.moved(this.set(key.name, value, event), key.name);
  }

  showNumber(key, made, scale, value) {
    made.slider.value = Math.round(scale.place(value));
    made.slider.setAttribute("aria-valuetext", valueText(key, value));
    if (!made.typing && !made.wrong) made.field.value = valueText(key, value);
  }

  // What was typed is sent as it is: the engine knows the rule, and says it where it is broken.
  take(key, made, event) {
    const text = made.field.value.trim();
    made.typing = false;
    if (text === valueText(key, made.value)) return;
    this.set(key.name, text === "" ? null : typedValue(key, text, valueText(key, made.value)), event);
  }

  // Words, notes, files, flags

  choiceField(key) {
    return this.radios(key, key.choices.map((choice) => [choice, choice]));
  }

  lawField(key) {
    const pictures = new Map();
    const made = this.radios(key, key.choices.map((law) => {
      pictures.set(law, lawPicture());
      return [law, pictures.get(law), law];
    }));
    made.kind = "law";
    made.pictures = pictures;
    return made;
  }

  radios(key, choices) {
    const radios = new Map();
    const labels = choices.map(([value, ...shown]) => {
      const radio = element("input", { type: "radio", name: `set-${key.name}`, value, "aria-describedby": `note-${key.name}`,
        change: (event) => this.set(key.name, value, event) });
      radios.set(value, radio);
      return element("label", { class: "segment" }, radio, ...shown.map((part) => (typeof part === "string" ? element("span", {}, part) : part)));
    });
    const id = `label-${key.name}`;
    const group = element("span", { class: "segments", role: "radiogroup", "aria-labelledby": id }, ...labels);
    return { kind: "choice", radios, parts: [element("span", { id, class: "label" }, this.title(key)), group],
      put: (value) => { for (const [choice, radio] of radios) radio.checked = choice === value; } };
  }

  flagField(key) {
    const id = `set-${key.name}`;
    const tick = element("input", { type: "checkbox", id, "aria-describedby": `note-${key.name}`, change: (event) => this.set(key.name, tick.checked, event) });
    return { kind: "flag", parts: [this.label(key, id), tick], put: (value) => { tick.checked = value; } };
  }

  textField(key) {
    const id = `set-${key.name}`;
    const field = element("input", { type: "text", id, autocomplete: "off", spellcheck: "false", "aria-describedby": `note-${key.name}`,
      change: (event) => this.set(key.name, field.value.trim() || null, event) });
    const made = { kind: "text", field, parts: [this.label(key, id), field], put: (value) => {
      made.value = value;
      if (!made.typing && !made.wrong) field.value = value ?? "";
    } };
    field.addEventListener("input", () => { made.typing = true; });
    field.addEventListener("change", () => {
      made.typing = false;
      if (noteNumber(field.value) !== null) made.value = field.value;
    });
    if (key.kind === "note") field.addEventListener("keydown", (event) => this.stepNote(event, key, made));
    return made;
  }

  stepNote(event, key, made) {
    const step = { ArrowUp: 1, ArrowDown: -1, PageUp: 12, PageDown: -12 }[event.key];
    const number = noteNumber(made.value);
    if (!step || number === null) return;
    event.preventDefault();
    const name = noteText((clamp(number + step, 0, 127) - MIDDLE_C) / 12);
    made.field.value = made.value = name;
    this.set(key.name, name, event);
  }

  label(key, id) {
    return element("label", { for: id, class: "label" }, this.title(key));
  }

  title(key) {
    return spoken(leafOf(key.name));
  }

  resetButton(key, made) {
    made.reset = element("button", { type: "button", class: "go reset", click: (event) => this.set(key.name, made.resetTo, event) }, "reset");
    return made.reset;
  }

  // To and from the engine

  beginGesture() {
    this.gestures += 1;
    this.gesture = GESTURES_OF_A_PANEL * this.model.guest + this.gestures;
  }

  set(name, value, event) {
    this.clearProblem(name);
    const gesture = this.gesture ?? undefined;
    const id = this.link.send({ do: "set", slot: this.model.current, key: name, value, gesture }, event);
    this.model.named(id, name);
    return id;
  }

  turn(table, on, event) {
    this.link.send({ do: "table", slot: this.model.current, table, on }, event);
  }

  // After a change of the state. What the person is moving just now is ahead of the state and stays.
  show() {
    const slot = this.model.slot;
    if (!slot) return;
    if (slot.number !== this.shown) for (const name of this.fields.keys()) this.clearProblem(name);
    this.shown = slot.number;
    for (const [name, field] of this.fields) {
      if (!this.model.isAhead(name)) field.show(slot.settings, slot);
    }
    this.showLaws(slot.settings);
  }

  showField(key, made, settings, slot) {
    const value = settings[key.name] ?? null;
    made.put(value ?? defaultOf(key) ?? (key.kind === "time" || key.kind === "number" ? 0 : null));
    const idle = slot.unused.includes(key.name);
    made.row.classList.toggle("idle", idle);
    setText(made.idle, idle ? IDLE : "");
    const loaded = this.model.loaded.get(slot.number)?.[key.name];
    made.resetTo = key.required ? loaded : key.default;
    const words = made.resetTo === undefined ? "" : made.resetTo === null ? (key.kind === "choice" ? "by the law" : "none") : valueText(key, made.resetTo);
    made.reset.disabled = made.resetTo === undefined || (made.resetTo === null ? !(key.name in slot.given) : value === made.resetTo);
    made.reset.setAttribute("aria-label", `Reset ${key.name.replace(".", " ")}${words ? ` to ${words}` : ""}`);
    made.reset.title = words && `back to ${words}`;
  }

  showLaws(settings) {
    for (const name of LAW_KEYS) {
      const table = name.split(".")[0];
      const constants = Object.fromEntries(["bend", "knee", "curvature"].map((leaf) =>
        [leaf, settings[`${table}.${leaf}`] ?? this.keys.get(`${table}.${leaf}`).default]));
      const text = JSON.stringify(constants);
      const { pictures } = this.fields.get(name);
      if (pictures.shown === text) continue;
      pictures.shown = text;
      for (const [law, picture] of pictures) picture.lastChild.setAttribute("d", lawPath(law, constants));
    }
  }

  // A value that was refused: the field keeps what was typed, and the rule stands beside it.
  problem(name, line) {
    const made = this.fields.get(name);
    if (!made?.row) return false;
    made.wrong = true;
    made.row.classList.add("wrong");
    setText(made.note, line);
    made.field?.setAttribute("aria-invalid", "true");
    return true;
  }

  clearProblem(name) {
    const made = this.fields.get(name);
    if (!made?.wrong) return;
    made.wrong = false;
    made.row.classList.remove("wrong");
    setText(made.note, "");
    made.field?.removeAttribute("aria-invalid");
  }

  tellAbout(key) {
    const range = key.rule.replace(/^must be (a |an |one of )?/, "");
    const counts = key.counts_for ? ` It counts for ${key.counts_for[1].join(" and ")}.` : "";
    setText(byId("about"), `${key.name}: ${key.description}. ${range[0].toUpperCase()}${range.slice(1)}.${counts}`);
  }
}

function placeOfGroup({ name }) {
  const place = GROUP_ORDER.indexOf(name);
  return place < 0 ? GROUP_ORDER.length : place;
}

function noteNumber(name) {
  const found = /^([A-G][#b]?)(-?\d+)$/.exec(name ?? "");
  if (!found) return null;
  const flat = found[1].endsWith("b");
  const at = NOTE_NAMES.indexOf(flat ? found[1][0] : found[1]);
  return at < 0 ? null : 12 * (Number(found[2]) + 1) + at - (flat ? 1 : 0);
}
