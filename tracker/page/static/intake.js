// A recording comes in: files dropped or chosen, the bench as a file or typed, then the measurement is asked for.

import { bytes, clearNotice, el, sentence } from "./dom.js";
import { post, remove, upload } from "./api.js";
import { PICTURE, dropped, packed } from "./dropping.js";

const ROLES = { recording: "Recording", bench: "Bench file", own: "Recording\u2019s own file", scale: "Scale file", picture: "Reference picture", log: "Voltage log" };
const TEXTS = ["bench", "own", "scale"];   // small files that are read here and sent with the request
const SECTIONS = [
  ["Cell", [["cell.plate_gap", "Plate gap", "6.00(2) mm"], ["cell.voltage", "Field-on voltage", "260.0(5) V"]]],
  ["Oil and air", [["oil.density", "Oil density", "886(1) kg/m^3"], ["oil.density_temperature", "\u2026 measured at", "20 degC"], ["air.temperature", "Temperature", "22.0(3) degC"], ["air.pressure", "Pressure", "1008(1) hPa"], ["air.relative_humidity", "Humidity", "45(5) percent"]]],
  ["Camera and place", [["camera.metres_per_pixel", "Size of a pixel", "2.980(5) um"], ["camera.exposure", "Exposure", "20 ms"], ["camera.frame_rate", "Frame rate", "25 Hz"], ["site.gravity", "Gravity", "9.8100(2) m/s^2"]]],
];
const HINTS = {
  "cell.voltage": "needed where the field is known only as on and off",
  "air.relative_humidity": "empty: dry air, 0 percent",
  "camera.metres_per_pixel": "or drop a reference picture or scale.json",
  "camera.exposure": "empty: half the time between frames",
  "camera.frame_rate": "only for recordings without times",
  "oil.density_temperature": "empty: the air's temperature",
};
const SOURCES = [["list", "typed list of times and voltages"], ["log", "log of the supply (CSV)"], ["lamp", "lamp in the picture"], ["motion", "the droplets' own motion"]];

const VIDEO = /\.(avi|mp4|m4v|mov|mkv|webm|mpe?g|ts)$/i;
const FEWEST = 10;   // pictures that make a folder a recording

export class Intake {
  constructor(box, shelf, { onStarted }) {
    Object.assign(this, { shelf, onStarted });
    this.files = {};
    this.started = new Set();   // numbers of jobs that were asked for on this page and have not ended
    this.current = null;        // the one of the files that are listed
    this.texts = {};
    this.values = {};
    this.error = el("p", { class: "error", role: "alert" });
    this.note = el("p", { class: "soft", role: "status" });
    this.drop = this.dropZone();
    this.list = el("ul", { class: "files" });
    this.formBox = el("div");
    this.go = el("button", { type: "submit", class: "main" }, "Measure");
    this.form = el("form", { noValidate: true, onsubmit: (event) => { event.preventDefault(); this.measure(); } }, this.list, this.formBox, el("div", { class: "row" }, this.go));
    box.append(el("section", { class: "card", "aria-labelledby": "intake-title" }, el("h2", { id: "intake-title" }, "Measure a recording"), this.drop, this.error, this.note, this.form,
      el("p", { class: "soft" }, "Results are kept in ", el("span", { class: "num" }, shelf.results), "."), this.status = el("p", { class: "hidden", role: "status" })));
    this.stop = (event) => { if ([...(event.dataTransfer?.types || [])].includes("Files")) event.preventDefault(); };
    for (const name of ["dragover", "drop"]) window.addEventListener(name, this.stop);
    this.fillForm();
    this.refresh();
  }

  dropZone() {
    const chooser = (id, label, more, take) => {
      const input = el("input", { type: "file", id, multiple: true, class: "hidden", tabIndex: -1, "aria-label": label, onchange: () => { take([...input.files]); input.value = ""; }, ...more });
      return input;
    };
    const files = chooser("files", "Files of a measurement", {}, (chosen) => this.take(chosen));
    const folder = chooser("folder", "Folder of pictures of a recording", { webkitdirectory: true }, (chosen) => this.takeFolder(chosen[0]?.webkitRelativePath.split("/")[0] || "pictures", chosen.filter((file) => file.webkitRelativePath.split("/").length === 2)));
    const zone = el("div", { class: "drop" }, el("strong", {}, "Drop a recording here"),
      el("p", { class: "soft" }, "a video, a TIFF stack or a folder of pictures, with its bench file, reference picture or voltage log"),
      el("div", { class: "row centre" }, el("button", { type: "button", onclick: () => files.click() }, "Choose files"), el("button", { type: "button", onclick: () => folder.click() }, "Choose a folder")), files, folder);
    zone.addEventListener("dragover", (event) => { event.preventDefault(); zone.classList.add("over"); });
    zone.addEventListener("dragleave", () => zone.classList.remove("over"));
    zone.addEventListener("drop", async (event) => {
      event.preventDefault();
      zone.classList.remove("over");
      try {
        const { files: single, folders } = await dropped(event.dataTransfer);
        for (const { name, inside } of folders) this.takeFolder(name, inside);
        if (single.length || !folders.length) this.take(single, folders.length > 0);
      } catch (error) { this.error.textContent = sentence(error.message); }
    });
    return zone;
  }

  // A folder: its pictures are one recording; whatever else lies in it is taken as if it had been dropped itself.
  takeFolder(name, inside) {
    const shown = inside.filter((file) => !file.name.startsWith("."));
    const pictures = shown.filter((file) => PICTURE.test(file.name)), videos = shown.filter((file) => VIDEO.test(file.name));
    const beside = shown.filter((file) => !PICTURE.test(file.name) && this.roleOf(file) !== "recording");
    this.error.textContent = "";
    if (videos.length) this.take([...videos, ...beside, ...(pictures.length === 1 ? pictures : [])]);
    else if (pictures.length < FEWEST) this.error.textContent = `The folder ${name} holds no recording: neither a video nor ${FEWEST} pictures or more (PNG, TIFF or JPEG).`;
    else if (pictures.some((file) => file.size === 0)) this.error.textContent = `A picture in the folder ${name} is empty.`;
    else {
      this.send("recording", packed(name, pictures), pictures.length);
      this.take(beside, true);
    }
  }

  roleOf(file) {
    const ending = file.name.toLowerCase().match(/\.[^.]*$/)?.[0] || "";
    // STEM.toml beside STEM.avi overrides single keys of the bench; any other is the bench file.
    const stem = (name) => name.replace(/\.[^.]*$/, "");
    const recording = this.files.recording;
    if (ending === ".toml") return recording && stem(file.name) === (recording.pictures ? recording.name : stem(recording.name)) ? "own" : "bench";
    if (ending === ".json") return "scale";
    if ([".csv", ".txt"].includes(ending)) return "log";
    if ([".png", ".jpg", ".jpeg", ".bmp"].includes(ending)) return "picture";
    if ([".tif", ".tiff"].includes(ending)) return this.files.recording ? "picture" : "recording";
    return "recording";
  }

  take(files, more = false) {
    if (!more) this.error.textContent = "";
    this.note.textContent = "";
    const several = files.filter((file) => VIDEO.test(file.name)), loose = files.filter((file) => PICTURE.test(file.name));
    if (several.length > 1) this.error.textContent = `One recording at a time: ${several[0].name} was taken. Many are measured by \u201cfallrise batch FOLDER\u201d.`;
    else if (loose.length > 2) { this.error.textContent = "Pictures of one recording: drop their folder. A single picture is taken as that of the reference pattern."; return; }
    files = files.filter((file) => !several.slice(1).includes(file));
    // Recordings first: the role of a .toml or .tif depends on them.
    const late = (file) => (/\.(toml|json|png|jpe?g|bmp|csv|txt)$/i.test(file.name) ? 1 : 0);
    for (const file of files.sort((a, b) => late(a) - late(b))) {
      const role = this.roleOf(file);
      if (TEXTS.includes(role)) this.readText(role, file);
      else this.send(role, file);
    }
    this.refresh();
  }

  async readText(role, file) {
    if (file.size > 100_000) { this.error.textContent = `${file.name} is too large for a ${ROLES[role].toLowerCase()}.`; return; }
    this.files[role] = { name: file.name, size: file.size, state: "done" };
    this.texts[role] = await file.text();
    this.fillForm();
    this.refresh();
  }

  async send(role, file, pictures = 0) {
    if (file.size > this.shelf.limit) { this.error.textContent = `${file.name} is too large: ${bytes(file.size)}, the limit is ${bytes(this.shelf.limit)}.`; return; }
    if (file.size === 0) { this.error.textContent = `${file.name} is empty.`; return; }
    if (role === "recording" && this.measuring) this.makeRoom();
    this.drop_(role);
    const entry = { name: file.name, size: file.size, state: "sending", sent: 0, pictures };
    this.files[role] = entry;
    const job = upload(file, pictures ? "pictures" : role, (sent) => { entry.sent = sent; this.refresh(); });
    entry.cancel = job.cancel;
    this.refresh();
    if (role === "picture") this.fillForm();
    try {
      const held = await job.done;
      entry.state = "done";
      entry.number = held.number;
      this.status.textContent = `${file.name} is here`;
    } catch (error) {
      if (this.files[role] === entry) delete this.files[role];
      this.error.textContent = sentence(`the file ${file.name} was not taken: ${error.message}`);
    }
    this.refresh();
  }

  // Whether the files that are listed here are being measured now.
  get measuring() { return this.started.has(this.current); }

  // The next recording: the one before goes on by itself, its bench is most likely that of this one too.
  makeRoom() {
    this.current = null;
    this.again = false;
    for (const role of ["recording", "own", "picture", "log"]) { delete this.files[role]; delete this.texts[role]; }
  }

  drop_(role) {
    const entry = this.files[role];
    if (!entry) return;
    if (entry.state === "sending") entry.cancel();
    else if (entry.number) remove(`/api/uploads/${entry.number}`).catch(() => {});
    delete this.files[role];
  }

  removeFile(role) {
    this.drop_(role);
    delete this.texts[role];
    this.note.textContent = "";
    if (role === "recording") this.again = false;
    this.fillForm();
    this.refresh();
  }

  refresh() {
    const roles = Object.keys(ROLES).filter((role) => this.files[role]);
    this.list.replaceChildren(...roles.map((role) => {
      const entry = this.files[role];
      const size = `${entry.pictures ? `${entry.pictures} pictures, ` : ""}${bytes(entry.size)}`, state = entry.state === "sending" ? `${bytes(entry.sent)} of ${size}` : size;
      const button = el("button", { type: "button", disabled: this.measuring, onclick: () => this.removeFile(role), "aria-label": `Remove ${entry.name}` }, entry.state === "sending" ? "Cancel" : "Remove");
      return el("li", {}, el("span", { class: "role" }, ROLES[role]), el("span", { class: "leaf" }, entry.name), el("span", { class: "num soft" }, state), button);
    }));
    this.form.hidden = !roles.length;
    const sending = roles.some((role) => this.files[role].state === "sending");
    this.go.disabled = !this.files.recording || sending || this.busy || this.measuring;
    this.go.textContent = sending ? "Sending \u2026" : this.busy ? "Starting \u2026" : this.measuring ? "Measuring \u2026" : this.again ? "Measure again" : "Measure";
  }

  field(key, title, example) {
    const id = `f-${key.replace(".", "-")}`;
    const input = el("input", { type: "text", id, name: key, value: this.values[key] || "", placeholder: `such as ${example}`, autocomplete: "off", spellcheck: false, "aria-describedby": `${id}-e${HINTS[key] ? ` ${id}-h` : ""}` });
    input.addEventListener("input", () => { this.values[key] = input.value; this.fault(key, ""); });
    return el("div", { class: "field" }, el("label", { htmlFor: id }, title), input, el("span", { class: "error", id: `${id}-e` }), HINTS[key] ? el("span", { class: "hint", id: `${id}-h` }, HINTS[key]) : null);
  }

  fillForm() {
    const parts = [];
    if (this.files.picture) parts.push(el("fieldset", {}, el("legend", {}, "Reference picture"), this.field("scale.pitch", "Spacing", "0.1(0) mm"), this.choice("scale.pattern", "Pattern", [["", "find out"], ["lines", "ruled lines"], ["grid", "square grid"], ["dots", "dots"]])));
    if (this.texts.bench === undefined) {
      parts.push(el("p", { class: "soft" }, "No bench file yet: drop one, or type what is known. Give units; a standard uncertainty stands in brackets and counts in the last digits: 6.00(2) mm is 6.00 mm \u00b1 0.02 mm."));
      for (const [title, fields] of SECTIONS) {
        const shown = fields.filter(([key]) => !(key === "camera.metres_per_pixel" && (this.files.picture || this.files.scale)));
        parts.push(el("fieldset", {}, el("legend", {}, title), ...shown.map((f) => this.field(...f))));
      }
      parts.push(this.fieldOfField());
    }
    this.formBox.replaceChildren(...parts);
  }

  choice(key, title, options) {
    const id = `f-${key.replace(".", "-")}`, select = el("select", { id, name: key, "aria-describedby": `${id}-e` }, ...options.map(([value, text]) => el("option", { value }, text)));
    select.value = this.values[key] || options[0][0];
    select.addEventListener("change", () => { this.values[key] = select.value; this.fault(key, ""); if (key === "field.source") { this.fillForm(); document.getElementById(id).focus(); } });
    return el("div", { class: "field" }, el("label", { htmlFor: id }, title), select, el("span", { class: "error", id: `${id}-e` }));
  }

  fieldOfField() {
    const source = this.values["field.source"] || "list";
    const more = { list: [["field.list", "Voltages", "0 s 0 V, 2 s 260 V, 4.4 s 0 V"]], log: [["field.clock_offset", "Clock offset", "auto"]], lamp: [["field.lamp", "Lamp x y w h", "8 8 16 16"]], motion: [] }[source];
    return el("fieldset", {}, el("legend", {}, "Field"), this.choice("field.source", "Known from", SOURCES), ...more.map((f) => this.field(...f)),
      source === "log" ? el("p", { class: "hint soft" }, "Drop the log as a CSV file with the columns time_s and voltage_v.") : "");
  }

  fault(key, text) {
    const id = `f-${key.replace(".", "-")}`, place = document.getElementById(`${id}-e`), input = document.getElementById(id);
    if (!place || !input) return false;
    place.textContent = text && sentence(text);
    input.setAttribute("aria-invalid", text ? "true" : "false");
    return true;
  }

  showFaults(faults) {
    const rest = [];
    for (const { key, message } of faults) if (!this.fault(key, message)) rest.push(key ? `the bench\u2019s ${key}: ${message}` : message);
    const marked = this.form.querySelectorAll('[aria-invalid="true"]').length;
    if (marked) rest.unshift(marked === 1 ? "One field needs another look" : `${marked} fields need another look`);
    this.error.textContent = rest.map(sentence).join(" ");
    this.form.querySelector('[aria-invalid="true"]')?.focus();
  }

  async measure() {
    this.error.textContent = "";
    for (const place of this.form.querySelectorAll('[aria-invalid="true"]')) this.fault(place.name, "");
    this.busy = true;
    this.refresh();
    const number = (role) => this.files[role]?.number || null;
    const values = Object.fromEntries(Object.entries(this.values).filter(([, text]) => text.trim()));
    const what = { recording: number("recording"), picture: number("picture"), log: number("log"), bench: this.texts.bench ?? null, own: this.texts.own ?? null, scale: this.texts.scale ?? null, values };
    try {
      const job = await post("/api/measure", what);
      this.started.add(job.number);
      this.current = job.number;
      this.status.textContent = `${this.files.recording.name} is being measured`;
      this.onStarted();
    } catch (error) {
      if (error.facts?.faults) this.showFaults(error.facts.faults);
      else this.error.textContent = sentence(error.message);
    }
    this.busy = false;
    this.refresh();
  }

  // A measurement that was asked for elsewhere on this page: its result opens when it is there.
  follow(job) {
    this.started.add(job.number);
    if (!this.files.recording || this.again) this.current = job.number;
    this.note.textContent = "";
    this.refresh();
  }

  // A measurement of this page ended without a result: the files stay, and what was wrong stands beside its field.
  ended(job) {
    if (!this.started.delete(job.number)) return;
    if (job.number !== this.current) { this.refresh(); return; }
    this.again = job.state !== "done";
    this.refresh();
    if (job.state === "failed") {
      const { key, found, allowed, message } = job.error;
      if (key && this.fault(key, `read ${found}; allowed: ${allowed}`)) return;
      this.error.textContent = sentence(message);
    } else if (job.state === "cancelled" && this.files.recording) this.note.textContent = "Cancelled. The files are still here: measure them again, or remove them.";
  }

  close() {
    for (const name of ["dragover", "drop"]) window.removeEventListener(name, this.stop);
    for (const entry of Object.values(this.files)) if (entry.state === "sending") entry.cancel();
    clearNotice("intake");
  }
}
