// The socket: what the engine tells, and what it is asked. It is opened again whenever it closes.

const FIRST_RETRY_MS = 250;
const LONGEST_RETRY_MS = 3000;
const KEPT_TIMES = 400;
const HEAD_BYTES = { 1: 48, 2: 16 };
const ROW = { back: 0, position: 1, target: 2, pitch: 3, gate: 4, control: 5, gain: 6, slot: 7, size: 8 };
const MODES = ["stopped", "phrase", "keys"];
const METER_NAMES = ["momentary", "shortTerm", "truePeak", "peak", "reduction"];

class Link extends EventTarget {
  constructor(token) {
    super();
    this.token = token;
    this.retry = FIRST_RETRY_MS;
    this.count = 0;
    this.sentAt = new Map();
    this.connect();
  }

  get open() {
    return this.socket?.readyState === WebSocket.OPEN;
  }

  connect() {
    const url = new URL("socket", location.href);
    url.protocol = location.protocol === "https:" ? "wss:" : "ws:";
    url.search = `?token=${encodeURIComponent(this.token)}`;
    this.socket = new WebSocket(url);
    this.socket.binaryType = "arraybuffer";
    this.socket.addEventListener("open", () => {
      this.retry = FIRST_RETRY_MS;
      this.tell("open");
    });
    this.socket.addEventListener("message", ({ data }) => this.read(data));
    this.socket.addEventListener("close", () => {
      this.tell("closed");
      setTimeout(() => this.connect(), this.retry);
      this.retry = Math.min(2 * this.retry, LONGEST_RETRY_MS);
    });
  }

  // `event` is what the person did: its time goes along, so that the way to the sound can be measured.
  send(message, event) {
    if (!this.open) return 0;
    this.count += 1;
    const at = performance.timeOrigin + (event?.timeStamp ?? performance.now());
    this.sentAt.set(this.count, at);
    if (this.sentAt.size > KEPT_TIMES) this.sentAt.delete(this.sentAt.keys().next().value);
    this.socket.send(JSON.stringify({ ...message, id: this.count, at }));
    return this.count;
  }

  // Without id and time, as it is asked for many times a second.
  ask(message) {
    if (this.open) this.socket.send(JSON.stringify(message));
  }

  read(data) {
    if (typeof data === "string") {
      const message = JSON.parse(data);
      for (const name of ["hello", "state", "change", "figures", "files", "refused", "done", "taken", "listener", "report"]) {
        if (name in message) this.tell(name, message);
      }
      return;
    }
    const kind = new Uint8Array(data, 0, 1)[0];
    if (kind === 1) this.tell("trace", traceOf(data));
    if (kind === 2) this.tell("sound", soundOf(data));
  }

  tell(what, detail) {
    this.dispatchEvent(new CustomEvent(what, { detail }));
  }
}

function traceOf(data) {
  const view = new DataView(data);
  const level = (index) => view.getFloat32(24 + 4 * index, true);
  return {
    mode: MODES[view.getUint8(1)],
    slot: view.getInt8(2),
    sample: view.getFloat64(8, true),
    position: view.getFloat32(16, true),
    round: view.getFloat32(20, true),
    meters: Object.fromEntries(METER_NAMES.map((name, index) => [name, level(index)])),
    level: level(METER_NAMES.length),
    rows: new Float32Array(data, HEAD_BYTES[1], view.getUint32(4, true) * ROW.size),
  };
}

function soundOf(data) {
  const view = new DataView(data);
  return { first: view.getFloat64(8, true), samples: new Float32Array(data, HEAD_BYTES[2], view.getUint32(4, true)) };
}
