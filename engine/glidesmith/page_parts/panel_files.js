// Presets in and out, phrases, and the capture of what is heard.

const NO_FILES = "no file in the folders";

class Files {
  constructor(model, link) {
    this.model = model;
    this.link = link;
    this.paths = { presets: [], phrases: [] };
    const submit = (id, act) => byId(id).addEventListener("submit", (event) => {
      event.preventDefault();
      act(event);
    });
    submit("save-form", (event) => link.send({ do: "save", slot: model.current, path: byId("save-path").value.trim(), replace: byId("save-replace").checked }, event));
    submit("load-form", (event) => link.send({ do: "load", slot: Number(byId("load-slot").value), path: byId("load-path").value }, event));
    submit("copy-form", (event) => link.send({ do: "copy", from: model.current, to: Number(byId("copy-to").value) }, event));
    submit("capture-form", (event) => this.capture(event));
    byId("phrase-file").addEventListener("change", (event) => this.choosePhrase(event));
    const numbers = () => Array.from({ length: 8 }, (_, index) => element("option", { value: index + 1 }, String(index + 1)));
    byId("load-slot").append(...numbers());
    byId("copy-to").append(...numbers());
    byId("copy-to").value = "2";
  }

  capture(event) {
    if (this.model.state.capture) this.link.send({ do: "capture_stop" }, event);
    else this.link.send({ do: "capture", path: byId("capture-path").value.trim(), replace: byId("capture-replace").checked }, event);
  }

  choosePhrase(event) {
    const { value } = byId("phrase-file");
    if (value) this.link.send({ do: "phrase", path: value }, event);
  }

  setFiles({ presets, phrases }) {
    this.paths = { presets, phrases };
    this.fill(byId("load-path"), presets, "");
    this.form = null;
    this.show();
  }

  fill(select, paths, first) {
    const kept = select.value;
    const options = paths.map((path) => element("option", { value: path, title: path }, shortPath(path)));
    const head = first ? [element("option", { value: "" }, first)] : paths.length ? [] : [element("option", { value: "" }, NO_FILES)];
    select.replaceChildren(...head, ...options);
    if (paths.includes(kept)) select.value = kept;
  }

  show() {
    const { state, slot } = this.model;
    if (!state || !slot) return;
    setText(byId("save-slot"), String(slot.number));
    if (this.saveOf !== `${slot.number} ${slot.path}`) {
      this.saveOf = `${slot.number} ${slot.path}`;
      byId("save-path").value = slot.path ?? `${fileName(slot.title || "patch")}.toml`;
    }
    const title = state.phrase?.title ?? "";
    if (this.form !== title) {
      this.form = title;
      this.fill(byId("phrase-file"), this.paths.phrases, title ? `${title} (playing)` : "choose a phrase");
      byId("phrase-file").value = "";
    }
    this.showCapture(state.capture);
  }

  showCapture(capture) {
    setText(byId("capture"), capture ? "Stop capture" : "Start capture");
    byId("capture").classList.toggle("main", Boolean(capture));
    byId("capture-path").disabled = byId("capture-replace").disabled = Boolean(capture);
    const lost = capture?.lost ? `, ${capture.lost} samples lost` : "";
    setText(byId("capture-text"), capture ? `\u25cf ${fixed(capture.seconds)} s captured${lost}` : "");
  }
}

// The folder that a file stands in, and its name.
function shortPath(path) {
  return path.split(/[\\/]/).slice(-2).join("/");
}

function fileName(title) {
  return title.toLowerCase().replace(/[^\p{L}\p{N}]+/gu, "-").replace(/^-|-$/g, "") || "patch";
}
