// The table of a batch: what is in it, in which order, and one player for all.

const PAGE_ROWS = 100;
const FEW_FAILURES = 12;
const FIELDS = ["item", "title", "preset", "phrase", "varied", "seconds", "never", "worst", "clicks", "clipped", "lufs", "peak", "gain", "warnings", "curve"];
const CURVE = { width: 240, height: 60 };
const TRIANGLE = "M3 1v12l10-6z";
const BARS = "M3 1h3v12h-3zM9 1h3v12h-3z";
const BY_NAME = new Intl.Collator("en", { numeric: true });
const DASH = "\u2013";

// A column: its head and unit, what it is sorted by, which way first, and what its cells hold.
const COLUMNS = [
  { key: "item", words: "Item", first: 1, text: true },
  { key: "never", words: "Never lands", first: -1, cell: neverCell, text: true },
  { key: "clicks", words: "Clicks", first: -1, cell: ({ clicks }) => warned(clicks) },
  { key: "clipped", words: "Clips", first: -1, cell: ({ clipped }) => warned(clipped) },
  { key: "curve", words: "Pitch", cell: curve, text: true },
  { key: "lufs", words: "Loudness", unit: "LUFS", first: -1, cell: ({ lufs }) => measured(lufs, fixed) },
  { key: "peak", words: "True peak", unit: "dBTP", first: -1, cell: ({ peak }) => measured(peak, fixed) },
  { key: "gain", words: "Gain", unit: "dB", first: -1, cell: ({ gain }) => measured(gain, signed) },
  { key: "seconds", words: "Length", unit: "s", first: -1, cell: ({ seconds }) => seconds.toFixed(1) },
];

const KINDS = [
  ["all", "all items", () => true],
  ["never", "what never lands", ({ never }) => never > 0],
  ["clicks", "what clicks", ({ clicks }) => clicks > 0],
  ["clips", "what clips", ({ clipped }) => clipped > 0],
  ["warned", "what has warnings", ({ warnings }) => warnings.length > 0],
];

function none() {
  return element("span", { class: "none" }, "0");
}

function warned(count) {
  return count > 0 ? element("b", { class: "never" }, grouped(count)) : none();
}

function measured(value, say) {
  return value === null ? element("span", { class: "none" }, DASH) : say(value);
}

function neverCell({ never, worst }) {
  if (never === 0) return none();
  const [from, to, short] = worst;
  const many = element("b", { class: "never" }, grouped(never));
  return element("span", {}, many, element("small", {}, named(from), " \u2192 ", named(to), `, ${cents(short)} short`));
}

function grouped(count) {
  return String(count).replace(/\B(?=(\d{3})+$)/g, ",");
}

function lasting(seconds) {
  if (seconds < 120) return `${seconds.toFixed(1)} s`;
  const minutes = Math.round(seconds / 60);
  return minutes < 120 ? `${minutes} min` : `${Math.floor(minutes / 60)} h ${minutes % 60} min`;
}

// The address of a file from the page's own folder. Bytes of a name that are no text came as halves of
// surrogate pairs.
function address(item) {
  const escaped = (char) => {
    const code = char.codePointAt(0);
    if (code >= 0xd800 && code <= 0xdfff) return `%${(code & 0xff).toString(16).padStart(2, "0")}`;
    return encodeURIComponent(char);
  };
  return `./${[...item].map((char) => (char === "/" ? "/" : escaped(char))).join("")}`;
}

class Summary {
  constructor(data) {
    this.data = data;
    this.rows = data.rows.map((values) => {
      const row = Object.fromEntries(FIELDS.map((name, place) => [name, values[place]]));
      row.preset ||= row.item.replace(/\.wav$/, ".toml");
      row.told = row.warnings.length;
      return row;
    });
    this.order = [...this.rows].sort(byWorst);
    this.sorted = null;
    this.page = 0;
    this.player = new Player((row) => this.after(row), () => this.markPlaying());
    this.showHeading();
    this.showFailures();
    this.showHeads();
    this.listen();
    this.select();
  }

  // What stands above the table

  showHeading() {
    const { totals, title, engines } = this.data;
    byId("title").replaceChildren(named(title));
    const counts = [[totals.never, "never lands", "never land"], [totals.clicks, "clicks", "click"], [totals.clips, "clips", "clip"]]
      .filter(([count]) => count > 0)
      .map(([count, one, several]) => element("b", {}, `${grouped(count)} ${count === 1 ? one : several}`));
    const said = counts.length ? counts.flatMap((part, place) => [place ? ", " : " ", part]) : [" All glides land, nothing clicks and nothing clips"];
    byId("subtitle").append(`${grouped(totals.items)} item${totals.items === 1 ? "" : "s"}, ${lasting(totals.seconds)} of sound.`, ...(totals.items ? [...said, "."] : []));
    byId("imprint").textContent = `Made by Glidesmith${engines.length ? ` ${engines.join(", ")}` : ""}. Nothing is loaded but the WAV files beside this page, and nothing is sent.`;
    const leftOut = byId("left-out");
    leftOut.hidden = totals.items === this.rows.length;
    leftOut.textContent = `The worst ${grouped(this.rows.length)} items are shown; the other ${grouped(totals.items - this.rows.length)} are in manifest.jsonl.`;
  }

  showFailures() {
    const { failures, totals } = this.data;
    if (totals.failures === 0) return;
    const lines = failures.map((line) => element("li", {}, named(line)));
    const list = (part) => element("ul", { class: "plain" }, ...part);
    const body = byId("failures-body");
    body.append(element("p", {}, `${grouped(totals.failures)} item${totals.failures === 1 ? "" : "s"} could not be made; all others were.`), list(lines.slice(0, FEW_FAILURES)));
    const more = totals.failures - FEW_FAILURES;
    if (more > 0) {
      const unnamed = totals.failures - failures.length;
      const rest = list(lines.slice(FEW_FAILURES));
      if (unnamed > 0) rest.append(element("li", {}, `and ${grouped(unnamed)} more, which this page does not name`));
      body.append(element("details", {}, element("summary", {}, `${grouped(more)} more`), rest));
    }
    byId("failures").hidden = false;
  }

  // Order and selection

  showHeads() {
    const heads = COLUMNS.map((column) => {
      const inside = [column.first ? element("button", { type: "button", class: "sort", click: () => this.sortBy(column) }, column.words) : column.words];
      if (column.unit) inside.push(element("small", {}, column.unit));
      return element("th", { scope: "col", class: !column.text && "number" }, ...inside);
    });
    byId("heads").append(...heads);
    byId("kind").append(...KINDS.map(([value, words, test]) => element("option", { value }, `${words} (${grouped(this.rows.filter(test).length)})`)));
  }

  listen() {
    byId("filter").addEventListener("input", () => this.select());
    byId("kind").addEventListener("change", () => this.select());
    byId("worst").addEventListener("click", () => this.sortBy(null));
    byId("choices").addEventListener("submit", (event) => event.preventDefault());
    byId("page-before").addEventListener("click", () => this.turnTo(this.page - 1));
    byId("page-after").addEventListener("click", () => this.turnTo(this.page + 1));
    byId("page").addEventListener("change", () => this.turnTo(Math.round(Number(byId("page").value)) - 1));
    byId("rows").addEventListener("keydown", (event) => this.key(event));
  }

  sortBy(column) {
    const again = column !== null && this.sorted?.column === column;
    this.sorted = column === null ? null : { column, way: again ? -this.sorted.way : column.first };
    this.order = [...this.rows].sort(this.sorted ? byColumn(column.key, this.sorted.way) : byWorst);
    this.select();
  }

  select() {
    const words = byId("filter").value.toLowerCase().split(/\s+/).filter(Boolean);
    const [, , test] = KINDS.find(([value]) => value === byId("kind").value);
    this.chosen = this.order.filter((row) => test(row) && words.every((word) => searched(row).includes(word)));
    this.turnTo(0);
    const all = this.chosen.length === this.rows.length;
    byId("count").textContent = all ? `${grouped(this.rows.length)} rows` : `${grouped(this.chosen.length)} of ${grouped(this.rows.length)} rows`;
  }

  // Pages of the table

  get pages() {
    return Math.max(1, Math.ceil(this.chosen.length / PAGE_ROWS));
  }

  turnTo(page) {
    this.page = clamp(Number.isFinite(page) ? page : this.page, 0, this.pages - 1);
    const start = this.page * PAGE_ROWS;
    const shown = this.chosen.slice(start, start + PAGE_ROWS);
    byId("table").setAttribute("aria-rowcount", this.chosen.length + 1);
    byId("rows").replaceChildren(...shown.map((row, place) => this.line(row, start + place)));
    byId("page").value = this.page + 1;
    byId("page").max = this.pages;
    byId("page-count").textContent = grouped(this.pages);
    byId("page-before").disabled = this.page === 0;
    byId("page-after").disabled = this.page === this.pages - 1;
    byId("pages").hidden = this.pages === 1;
    COLUMNS.forEach((column, place) => {
      const way = this.sorted?.column === column ? this.sorted.way : 0;
      const head = byId("heads").children[place];
      if (way) head.setAttribute("aria-sort", way > 0 ? "ascending" : "descending");
      else head.removeAttribute("aria-sort");
    });
    this.markPlaying();
  }

  line(row, place) {
    const cells = COLUMNS.slice(1).map((column) => element("td", { class: !column.text && "number" }, column.cell(row)));
    const made = element("tr", { "aria-rowindex": place + 2 }, element("th", { scope: "row" }, this.head(row)), ...cells);
    made.row = row;
    return made;
  }

  head(row) {
    const play = element("button", { type: "button", class: "player", "aria-pressed": "false", "aria-label": `Play ${row.item}`, click: () => this.player.toggle(row) }, icon(TRIANGLE));
    const parts = [play, element("a", { href: address(row.item) }, named(row.item.replace(/\.wav$/, "")))];
    const about = [row.title, row.varied, row.phrase && `phrase ${row.phrase.split("/").pop()}`].filter(Boolean);
    if (about.length) parts.push(element("small", {}, ...about.flatMap((text, index) => [index ? ", " : "", named(text)])));
    if (row.warnings.length) {
      const summary = `${row.warnings.length} warning${row.warnings.length === 1 ? "" : "s"}`;
      parts.push(element("details", {}, element("summary", {}, summary), element("ul", {}, ...row.warnings.map((text) => element("li", {}, named(text))))));
    }
    return element("div", { class: "item" }, ...parts);
  }

  // Playing

  markPlaying() {
    for (const made of byId("rows").children) {
      const button = made.querySelector(".player");
      const playing = this.player.row === made.row && this.player.sounds;
      if (String(playing) === button.getAttribute("aria-pressed")) continue;
      button.setAttribute("aria-pressed", playing);
      button.replaceChildren(icon(playing ? BARS : TRIANGLE));
    }
  }

  after(row) {
    const place = this.chosen.indexOf(row);
    if (place < 0 || place + 1 >= this.chosen.length) return;
    const page = Math.floor((place + 1) / PAGE_ROWS);
    if (page !== this.page) this.turnTo(page);
    this.player.begin(this.chosen[place + 1]);
  }

  key(event) {
    const way = { ArrowDown: 1, ArrowUp: -1 }[event.key];
    const made = event.target.closest("tr");
    if (!way || !made || !event.target.matches(".player") || event.ctrlKey || event.altKey || event.metaKey) return;
    const place = Number(made.getAttribute("aria-rowindex")) - 2 + way;
    if (place < 0 || place >= this.chosen.length) return;
    event.preventDefault();
    const page = Math.floor(place / PAGE_ROWS);
    if (page !== this.page) this.turnTo(page);
    byId("rows").children[place % PAGE_ROWS].querySelector(".player").focus();
  }
}

// One player for all rows: a media element that reads the WAV beside the page.
class Player {
  constructor(ended, changed) {
    this.row = null;
    this.audio = new Audio();
    this.audio.preload = "auto";
    this.setLevel();
    byId("level").addEventListener("input", () => this.setLevel());
    byId("play").addEventListener("click", () => this.row && this.toggle(this.row));
    byId("seek").addEventListener("input", () => this.seek());
    this.audio.addEventListener("timeupdate", () => this.showPosition());
    this.audio.addEventListener("error", () => this.complain());
    this.audio.addEventListener("ended", () => byId("go-on").checked && ended(this.row));
    for (const name of ["play", "pause", "ended", "error"]) {
      this.audio.addEventListener(name, () => {
        byId("play").textContent = this.sounds ? "Pause" : "Play";
        changed();
      });
    }
  }

  get sounds() {
    return this.row !== null && !this.audio.paused && !this.audio.ended && !this.audio.error;
  }

  setLevel() {
    const slider = byId("level");
    const level = Number(slider.value);
    const silent = level <= Number(slider.min);
    const words = silent ? "silent" : decibels(level, 0);
    byId("level-text").textContent = words;
    slider.setAttribute("aria-valuetext", words);
    this.audio.volume = silent ? 0 : 10 ** (level / 20);
  }

  toggle(row) {
    if (row !== this.row) this.begin(row);
    else if (this.sounds) this.audio.pause();
    else this.play();
  }

  begin(row) {
    this.row = row;
    byId("player").hidden = false;
    byId("playing").replaceChildren(named(row.item));
    byId("length").textContent = `${row.seconds.toFixed(1)}\u00a0s`;
    byId("seek").max = row.seconds;
    this.audio.src = address(row.item);
    this.showPosition();
    this.play();
  }

  // A browser turns the promise down when another row is chosen before this one sounds, which is no mistake;
  // a file that can't be played comes as an event.
  play() {
    byId("problem").textContent = "";
    this.audio.play().catch(() => {});
  }

  seek() {
    this.audio.currentTime = Number(byId("seek").value);
    this.showPosition();
  }

  showPosition() {
    const seconds = this.audio.currentTime;
    const words = `${seconds.toFixed(1)}\u00a0s`;
    byId("position").textContent = words;
    byId("seek").value = seconds;
    byId("seek").setAttribute("aria-valuetext", words);
  }

  complain() {
    byId("problem").replaceChildren(named(this.row.item), " can\u2019t be played here: the file is not where it was made, or this browser does not know its format.");
  }
}

function icon(path) {
  return drawn("svg", { viewBox: "0 0 14 14", width: 14, height: 14, "aria-hidden": "true", focusable: "false" }, drawn("path", { d: path }));
}

function curve({ curve: path }) {
  if (!path) return "";
  const box = { viewBox: `0 0 ${CURVE.width} ${CURVE.height}`, preserveAspectRatio: "none", class: "curve", "aria-hidden": "true", focusable: "false" };
  return drawn("svg", box, drawn("path", { d: path }));
}

// What is searched: made once for each row, when somebody searches.
function searched(row) {
  row.text ??= [row.item, row.title, row.preset, row.phrase, row.varied, ...row.warnings].join("\n").toLowerCase();
  return row.text;
}

// What never lands first, then what clicks, what clips, what has warnings.
function byWorst(one, other) {
  return other.never - one.never || other.clicks - one.clicks || other.clipped - one.clipped || other.told - one.told || BY_NAME.compare(one.item, other.item);
}

// What has no figure stands at the end, whichever way.
function byColumn(key, way) {
  return (one, other) => {
    const [left, right] = [one[key], other[key]];
    if (left === null || right === null) return (left === null) - (right === null) || BY_NAME.compare(one.item, other.item);
    const order = typeof left === "string" ? BY_NAME.compare(left, right) : left - right;
    return way * order || BY_NAME.compare(one.item, other.item);
  };
}

new Summary(JSON.parse(byId("data").textContent));
