// The slots: which is heard, what they are called, and in what they differ from the first.

const MOST_DIFFERENCES = 3;

class Slots {
  constructor(model, link) {
    this.model = model;
    this.link = link;
    this.when = "now";
    const choices = [["now", "change at once"], ["loop", "at the loop’s start"]];
    byId("when").append(...choices.map(([value, words]) => element("label", { class: "segment" },
      element("input", { type: "radio", name: "when", value, checked: value === "now", change: () => { this.when = value; } }), element("span", {}, words))));
  }

  select(number, event, when = this.when) {
    if (this.model.slots.some((slot) => slot.number === number)) this.link.send({ do: "select", slot: number, when }, event);
  }

  // Built anew only where the slots themselves change: a button that is being pressed stays what it is.
  show() {
    const { slots } = this.model;
    const form = slots.map(({ number }) => number).join();
    if (form !== this.form) this.build(slots);
    this.form = form;
    for (const slot of slots) this.showOne(slot);
  }

  build(slots) {
    this.rows = new Map();
    byId("slot-buttons").replaceChildren(...slots.map(({ number }) => this.button(number)));
    byId("slot-list").replaceChildren(...slots.map(({ number }) => this.row(number)));
  }

  button(number) {
    const button = element("button", { type: "button", class: "slot-button", "aria-label": `Slot ${number}`,
      click: (event) => this.select(number, event) }, String(number));
    this.rows.set(number, { button });
    return button;
  }

  row(number) {
    const parts = { title: element("b", {}), differs: element("small", { class: "differs" }), facts: element("small", { class: "slot-facts" }) };
    const words = element("span", { class: "slot-words" }, parts.title, parts.differs);
    const row = element("button", { type: "button", class: "slot-row", click: (event) => this.select(number, event) },
      element("kbd", {}, String(number)), swatch(number - 1), words, parts.facts);
    Object.assign(this.rows.get(number), parts, { row });
    return row;
  }

  showOne(slot) {
    const { button, row, title, differs, facts } = this.rows.get(slot.number);
    const isHeard = slot.number === this.model.current;
    const waits = slot.number === this.model.state.waiting_slot;
    for (const pressed of [button, row]) {
      pressed.setAttribute("aria-pressed", String(isHeard));
      pressed.classList.toggle("waits", waits);
    }
    title.replaceChildren(named(nameOf(slot)));
    const marks = [slot.changed ? "changed" : "", waits ? "comes at the loop’s start" : ""].filter(Boolean);
    if (marks.length) title.append(element("small", {}, ` ${marks.join(", ")}`));
    setText(differs, slot.number === this.model.slots[0].number ? "" : this.differences(slot));
    const gain = this.model.state.match ? `match ${signed(slot.match_gain_db ?? 0)} dB` : "not matched";
    const loud = typeof slot.lufs === "number" && slot.lufs > -100 ? `${fixed(slot.lufs)} LUFS` : "";
    setText(facts, [loud, gain].filter(Boolean).join("\n"));
  }

  differences(slot) {
    const first = this.model.slots[0].settings;
    const names = [...new Set([...Object.keys(first), ...Object.keys(slot.settings)])]
      .filter((name) => name !== "title" && !name.startsWith("phrase.") && first[name] !== slot.settings[name] && !slot.unused.includes(name));
    const place = (name) => placeOfGroup({ name: name.split(".")[0] });
    names.sort((one, other) => place(one) - place(other));
    const said = names.slice(0, MOST_DIFFERENCES).map((name) => {
      const key = this.model.keys.get(name);
      return `${name.split(".")[0]} ${spoken(leafOf(name))} ${name in slot.settings && key ? valueText(key, slot.settings[name]) : "off"}`;
    });
    if (names.length > MOST_DIFFERENCES) said.push(`${names.length - MOST_DIFFERENCES} more`);
    return said.length ? said.join(", ") : "as slot 1";
  }
}

// Text that is the same already is left alone: nothing is announced or laid out anew.
function setText(holder, text) {
  if (holder.textContent !== text) holder.textContent = text;
}
