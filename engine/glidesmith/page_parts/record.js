// The record of blind rounds: kept by the browser where it allows that, so that leaving the page loses none, and
// saved as files. What was begun is told in every later sheet, also when the rounds themselves are forgotten, and
// when the set has got more candidates since.

const SHEET = { kind: "glidesmith listening sheet", version: 1 };
const BUNDLE = { kind: "glidesmith listening sheets", version: 1 };
const MOST_TOLD = 50; // earlier rounds that a sheet lists; all are counted
const BEAT_S = 5; // how often a running round says that it still runs
const SILENT_TAB_S = 150; // so long may a page in the background be kept from saying so

// An id that no other round has; randomUUID() is refused on pages that are not from a secure place.
function drawId() {
  return [...crypto.getRandomValues(new Uint8Array(16))].map((byte) => byte.toString(16).padStart(2, "0")).join("");
}

// What later sheets tell of a round. `among` are the candidates' hashes, by which it is known whom it concerns.
function brief(sheet) {
  const { id, set, made, test, listener, finished, pair, labels } = sheet;
  const [answered, planned] = sheet.test === "abx"
    ? [sheet.trials.length, sheet.trials_planned]
    : [sheet.pairs.length, pairCount(sheet.candidates.length)];
  const among = pair ?? sheet.candidates.map(({ settings_sha256 }) => settings_sha256);
  return { id, set, made, test, listener, finished, answered, planned, among, ...(pair ? { pair, labels } : {}) };
}

function pairCount(candidates) {
  return (candidates * (candidates - 1)) / 2;
}

// Pages of one phrase share the browser's storage: it is read anew whenever it is asked or written. A round of
// another set concerns this one where at least two of its candidates are here too.
class Record extends EventTarget {
  constructor({ set, phrase, sample_rate, equal, candidates }) {
    super();
    this.set = set;
    this.hashes = new Set(candidates.map(({ settings_sha256 }) => settings_sha256));
    this.key = ["glidesmith", phrase.sha256, sample_rate, equal.mode, equal.interval_semitones, equal.from].join(" ");
    this.failing = false; // whether the browser refused to keep a round
    this.own = new Map(); // this page's sheets: they last as long as it is open, whatever the storage does
    this.begun = new Map(); // briefs of the same, which forgetting leaves
    this.running = null;
    setInterval(() => this.beat(), 1000 * BEAT_S);
    addEventListener("pagehide", () => this.rest());
    addEventListener("storage", ({ key }) => {
      if (key === null || key.startsWith(this.key)) this.dispatchEvent(new Event("change"));
    });
  }

  get sheets() {
    return this.allSheets().filter((sheet) => this.concerns(brief(sheet)));
  }

  // Every round of these candidates that was ever begun here, in brief.
  get rounds() {
    return this.allRounds().filter((each) => this.concerns(each));
  }

  concerns({ set, among }) {
    return set === this.set || among.filter((hash) => this.hashes.has(hash)).length > 1;
  }

  allSheets() {
    const sheets = new Map(this.stored().map((sheet) => [sheet.id, sheet]));
    for (const [id, sheet] of this.own) sheets.set(id, sheet);
    return inOrder(sheets);
  }

  allRounds() {
    const known = this.read("earlier", []).filter((each) => each?.id && Array.isArray(each.among));
    const rounds = new Map(known.map((each) => [each.id, each]));
    for (const [id, each] of this.begun) rounds.set(id, each);
    for (const sheet of this.allSheets()) rounds.set(sheet.id, brief(sheet));
    return inOrder(rounds);
  }

  // A sheet as it is saved: with what was begun here before it.
  whole(sheet) {
    const before = this.rounds.filter(({ id, made }) => id !== sheet.id && made <= sheet.made);
    const told = before.slice(-MOST_TOLD).map(({ among, ...each }) => each);
    return { ...sheet, earlier: { count: before.length, rounds: told } };
  }

  keep(sheet) {
    this.own.set(sheet.id, sheet);
    this.begun.set(sheet.id, brief(sheet));
    const written = [this.write("", this.allSheets()), this.write("earlier", this.allRounds())];
    this.failing = !written.every(Boolean);
  }

  // Rounds that run elsewhere stay, and those of other candidates.
  forget() {
    const gone = new Set(this.sheets.map(({ id }) => id).filter((id) => !this.runs(id)));
    const kept = this.allSheets().filter(({ id }) => !gone.has(id));
    this.own.clear();
    this.write("", kept);
    this.failing = false;
  }

  // Running rounds: while one goes on, no page gives away what it holds.

  run(id) {
    this.running = id;
    this.beat();
  }

  rest() {
    if (this.running === null) return;
    const beats = this.read("running", {});
    delete beats[this.running];
    this.running = null;
    this.write("running", beats);
  }

  // Also looks after the others: one that fell silent has ended.
  beat() {
    if (this.running === null) this.dispatchEvent(new Event("change"));
    else this.write("running", { ...this.read("running", {}), [this.running]: Date.now() });
  }

  runs(id) {
    const since = Date.now() - this.read("running", {})[id];
    return id === this.running || Math.abs(since) < 1000 * SILENT_TAB_S;
  }

  // Storage

  stored() {
    return this.read("", []).filter((sheet) => sheet?.kind === SHEET.kind && sheet.id && (sheet.pair ?? sheet.candidates));
  }

  read(name, otherwise) {
    try {
      const found = JSON.parse(localStorage.getItem(this.place(name)));
      return Array.isArray(found) === Array.isArray(otherwise) && found ? found : otherwise;
    } catch {
      return otherwise;
    }
  }

  // Whether it could be written. Without storage the record lasts as long as the page is open.
  write(name, value) {
    try {
      localStorage.setItem(this.place(name), JSON.stringify(value));
      return true;
    } catch {
      return false;
    }
  }

  place(name) {
    return name ? `${this.key} ${name}` : this.key;
  }
}

function inOrder(rounds) {
  return [...rounds.values()].sort((one, other) => (one.made < other.made ? -1 : Number(one.made > other.made)));
}

function saveSheet(sheet) {
  saveFile(`${sheet.test}-${fileWord(sheet.listener)}-${fileTime(sheet.made)}.json`, sheet);
}

function saveSheets(sheets, set) {
  saveFile(`rounds-${set.slice(0, 12)}-${fileTime(new Date().toISOString())}.json`, { ...BUNDLE, set, sheets });
}

function fileWord(name) {
  return name.normalize("NFKD").replace(/[^A-Za-z0-9]+/g, "-").replace(/^-+|-+$/g, "").toLowerCase() || "listener";
}

function fileTime(made) {
  return made.replace(/\.\d+/, "").replace(/[:T]/g, "-").replace("Z", "");
}

function saveFile(name, content) {
  const link = element("a", { download: name });
  link.href = URL.createObjectURL(new Blob([`${JSON.stringify(content, null, 1)}\n`], { type: "application/json" }));
  link.click();
  setTimeout(() => URL.revokeObjectURL(link.href), 10000);
}
