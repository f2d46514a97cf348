// Playing, stepping and scrubbing, and how the picture looks. Keys work on the picture, on the bar of time and on the page.

import { el } from "./dom.js";
import { nearestFrame } from "./tracks.js";
import { volts } from "./timebar.js";

export class Player {
  constructor(watch, { frames, stage, timebar, stageBox, timeBox }) {
    Object.assign(this, { frames, stage, timebar });
    this.times = [0];
    this.playing = false;
    const press = (text, label, call, key) => {
      // A word on a button is its name; a sign needs one.
      const name = /[a-z]{2}/i.test(text) ? undefined : label;
      return el("button", { type: "button", title: key ? `${label} (key ${key})` : label, "aria-label": name, onclick: call }, text);
    };
    this.play = press("\u25b6\ufe0e", "Play", () => this.toggle(), "Space");
    this.speed = el("select", { id: "speed", onchange: () => this.restart() }, ...[0.1, 0.25, 0.5, 1, 2, 4].map((s) => el("option", { value: String(s), selected: s === 1 }, `\u00d7 ${s}`)));
    this.clock = el("span", { class: "clock num" });
    this.marks = press("Tracks", "Show tracks", () => this.setMarks(!this.stage.marks), "T");
    this.marks.setAttribute("aria-pressed", "true");
    this.clearButton = press("Background off", "Take away what stands still", () => this.setClear(!this.frames.clear), "B");
    this.clearButton.setAttribute("aria-pressed", "false");
    this.zoomText = el("span", { class: "num" });
    const slider = (id, text) => el("label", { htmlFor: id }, text, el("input", { type: "range", id, min: "0.3", max: "4", step: "0.05", value: "1", oninput: () => this.look() }));
    const brightness = slider("brightness", "Brightness"), contrast = slider("contrast", "Contrast");
    this.brightness = brightness.querySelector("input");
    this.contrast = contrast.querySelector("input");
    const plain = press("As recorded", "Brightness and contrast as recorded", () => { this.brightness.value = this.contrast.value = "1"; this.look(); });
    this.row = el("div", { class: "transport" },
      press("\u2039", "One frame back", () => this.step(-1), "Left"), this.play, press("\u203a", "One frame on", () => this.step(1), "Right"),
      el("label", { htmlFor: "speed", class: "hidden" }, "Speed"), this.speed, this.clock, el("span", { class: "sep" }),
      press("\u2212", "Zoom out", () => stage.zoomBy(1 / 1.5), "-"), this.zoomText, press("+", "Zoom in", () => this.zoomIn(), "+"), press("Fit", "Fit the whole picture", () => stage.whole(), "0"),
      el("span", { class: "sep" }), this.marks, this.clearButton, el("span", { class: "look" }, brightness, contrast, plain));
    watch.append(this.row);
    for (const box of [stageBox, timeBox]) {
      box.addEventListener("keydown", (event) => { if (this.key(event)) { event.preventDefault(); event.stopPropagation(); } });
    }
    stageBox.addEventListener("dblclick", () => this.zoomIn());
  }

  setTimes(times, segments) {
    this.times = times;
    this.timebar.setTimes(times, segments);
    this.go(0);
  }

  setPack(pack) {
    this.clearButton.disabled = pack.state !== "ready";
    this.clearButton.title = pack.state === "ready" ? "Take away what stands still (key B)" : "Known once all pictures have been read";
  }

  go(frame) {
    const wanted = Math.min(this.times.length - 1, Math.max(0, frame));
    this.frames.want(wanted);
    this.timebar.setFrame(wanted);
  }

  step(by) {
    this.stop();
    this.go(this.frames.wanted + by);
  }

  zoomIn() {
    const track = this.stage.tracks.get(this.stage.chosen);
    const place = track && this.stage.zoom === 1 ? this.chosenOnScreen() : undefined;
    this.stage.zoomBy(1.5, place);
  }

  chosenOnScreen() {
    const track = this.stage.tracks.get(this.stage.chosen);
    const row = track.frame.indexOf(this.stage.state.frame);
    return row < 0 ? undefined : this.stage.toScreen(track.x[row], track.y[row]);
  }

  toggle() { if (this.playing) this.stop(); else this.start(); }

  start() {
    if (this.frames.wanted >= this.times.length - 1) this.go(0);
    this.playing = true;
    this.play.textContent = "\u2759\u2759";
    this.play.setAttribute("aria-label", "Pause");
    this.restart();
    const tick = (now) => {
      if (!this.playing) return;
      const time = this.from + ((now - this.began) / 1000) * Number(this.speed.value);
      const frame = nearestFrame(this.times, time);
      if (frame !== this.frames.wanted) this.go(frame);
      if (frame >= this.times.length - 1) this.stop();
      else requestAnimationFrame(tick);
    };
    requestAnimationFrame(tick);
  }

  restart() {
    this.from = this.times[this.frames.wanted];
    this.began = performance.now();
  }

  stop() {
    if (!this.playing) return;
    this.playing = false;
    this.play.textContent = "\u25b6\ufe0e";
    this.play.setAttribute("aria-label", "Play");
  }

  setMarks(on) {
    this.stage.marks = on;
    this.marks.setAttribute("aria-pressed", String(on));
    this.stage.draw();
  }

  setClear(on) {
    if (this.clearButton.disabled) return;
    this.frames.clear = on;
    this.clearButton.setAttribute("aria-pressed", String(on));
    this.frames.again();
  }

  look() { this.stage.setLook(Number(this.brightness.value), Number(this.contrast.value)); }

  refreshZoom() { this.zoomText.textContent = `${Math.round(100 * this.stage.scale)} %`; }

  // The numbers always belong to the picture that was drawn.
  drawn(state) {
    const time = this.times[state.frame] ?? 0, segment = this.timebar.segmentAt(time);
    this.clock.textContent = `${time.toFixed(3)} s \u00b7 frame ${state.frame} \u00b7 ${segment ? volts(segment) : "field changing"}`;
    if (!this.zoomText.textContent) this.refreshZoom();
  }

  key(event) {
    const way = { ArrowLeft: -1, ArrowRight: 1 }[event.key];
    if (event.altKey && (way || event.key === "ArrowUp" || event.key === "ArrowDown")) {
      this.stage.panBy(40 * (way || 0), event.key === "ArrowUp" ? -40 : event.key === "ArrowDown" ? 40 : 0);
      return true;
    }
    if (way) { this.step(way * (event.shiftKey ? 10 : 1)); return true; }
    switch (event.key) {
      case " ": this.toggle(); return true;
      case "PageUp": this.step(-50); return true;
      case "PageDown": this.step(50); return true;
      case "Home": this.stop(); this.go(0); return true;
      case "End": this.stop(); this.go(this.times.length - 1); return true;
      case "+": case "=": this.zoomIn(); return true;
      case "-": this.stage.zoomBy(1 / 1.5); return true;
      case "0": this.stage.whole(); return true;
      case "t": case "T": this.setMarks(!this.stage.marks); return true;
      case "b": case "B": this.setClear(!this.frames.clear); return true;
      default: return false;
    }
  }

  close() { this.playing = false; }
}
