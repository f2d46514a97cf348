// The bar of time under the picture: segments of the field, the stretch of the chosen droplet, the playhead.

import { fitCanvas } from "./dom.js";
import { nearestFrame } from "./tracks.js";

export const volts = (s) => (s.way === 0 ? "off" : number(s.voltage));
const number = (v) => `${v > 0 ? "+" : "\u2212"}${Math.abs(v) >= 100 ? Math.abs(v).toFixed(0) : Math.abs(v).toPrecision(3)} V`;

export class TimeBar {
  constructor(box, { onScrub }) {
    this.box = box;
    this.onScrub = onScrub;
    this.canvas = document.createElement("canvas");
    this.canvas.setAttribute("aria-hidden", "true");
    box.append(this.canvas);
    this.times = [0];
    this.segments = [];
    this.span = null;
    this.frame = 0;
    this.ready = 0;
    this.still = document.createElement("canvas");   // all but the playhead, drawn only when it changes
    this.watcher = new ResizeObserver(() => this.draw());
    this.watcher.observe(box);
    box.addEventListener("pointerdown", (event) => {
      if (event.button !== 0) return;
      box.setPointerCapture(event.pointerId);
      this.dragging = true;
      this.scrub(event);
    });
    box.addEventListener("pointermove", (event) => { if (this.dragging) this.scrub(event); });
    for (const end of ["pointerup", "pointercancel"]) box.addEventListener(end, () => { this.dragging = false; });
  }

  setTimes(times, segments) {
    this.times = times;
    this.segments = segments;
    this.box.setAttribute("aria-valuemin", "0");
    this.box.setAttribute("aria-valuemax", String(times.length - 1));
    this.draw();
    this.tell();
  }

  segmentAt(time) { return this.segments.find((s) => time >= s.start && time < s.end); }

  setFrame(frame) {
    this.frame = frame;
    this.drawHead();
    // Screen readers are told where the playhead rests, not every place that it passes.
    clearTimeout(this.telling);
    this.telling = setTimeout(() => this.tell(), 150);
  }

  tell() {
    const time = this.times[this.frame] ?? 0, segment = this.segmentAt(time);
    this.box.setAttribute("aria-valuenow", String(this.frame));
    this.box.setAttribute("aria-valuetext", `frame ${this.frame}, ${time.toFixed(2)} seconds, field ${segment ? volts(segment) : "changing"}`);
  }

  get range() {
    const first = this.times[0], last = this.times[this.times.length - 1];
    return [first, last > first ? last : first + 1];
  }

  at(time) {
    const [first, last] = this.range;
    return 7 + ((time - first) / (last - first)) * (this.box.clientWidth - 14);
  }

  scrub(event) {
    const rect = this.box.getBoundingClientRect(), [first, last] = this.range;
    const share = Math.min(1, Math.max(0, (event.clientX - rect.left - 7) / (rect.width - 14)));
    this.onScrub(nearestFrame(this.times, first + share * (last - first)));
  }

  draw() {
    const { context: c, width, height } = fitCanvas(this.canvas);
    if (width < 10) return;
    const low = height - 14;
    c.fillStyle = "#0f171b";
    c.fillRect(7, 2, width - 14, low - 2);
    c.font = `${Math.round(11 * rootScale())}px system-ui, sans-serif`;
    for (const s of this.segments) this.drawSegment(c, s, low);
    if (this.ready < this.times.length) {
      c.fillStyle = "rgba(15,23,27,.65)";
      const from = this.at(this.times[Math.max(0, this.ready)] ?? this.times[0]);
      c.fillRect(from, 2, width - 7 - from, low - 2);
    }
    this.drawSpan(c, low);
    Object.assign(this.still, { width: this.canvas.width, height: this.canvas.height });
    this.still.getContext("2d").drawImage(this.canvas, 0, 0);
    this.size = [width, height];
    this.drawHead();
  }

  drawHead() {
    if (!this.size) return;
    const [width, height] = this.size, c = this.canvas.getContext("2d");
    c.save();
    c.setTransform(1, 0, 0, 1, 0, 0);
    c.clearRect(0, 0, this.canvas.width, this.canvas.height);
    c.drawImage(this.still, 0, 0);
    c.restore();
    const [first, last] = this.range, time = this.times[this.frame] ?? 0;
    const x = 7 + ((time - first) / (last - first)) * (width - 14);
    c.fillStyle = "#fff";
    c.fillRect(x - 1, 0, 2, height - 3);
    c.beginPath();
    c.moveTo(x - 6, height); c.lineTo(x + 6, height); c.lineTo(x, height - 8);
    c.fill();
  }

  drawSegment(c, s, low) {
    const [first, last] = this.range;
    const a = this.at(Math.max(first, s.start)), b = this.at(Math.min(last, s.end));
    if (b <= a) return;
    c.fillStyle = s.way > 0 ? "#2c6b75" : s.way < 0 ? "#74562c" : "#2b383e";
    c.fillRect(a, 2, b - a, low - 2);
    if (s.way < 0) hatch(c, a, 2, b - a, low - 2, "rgba(255,255,255,.16)");
    c.fillStyle = "#0f171b";
    c.fillRect(b - 0.5, 2, 1, low - 2);
    c.fillStyle = "#eaf1ef";
    const text = [volts(s), volts(s).replace(" V", ""), s.way > 0 ? "+" : s.way < 0 ? "\u2212" : "0"].find((t) => c.measureText(t).width < b - a - 6);
    if (text) c.fillText(text, a + 4, 2 + (low + 6) / 2);
  }

  drawSpan(c, low) {
    if (!this.span) return;
    const a = this.at(this.span[0]), b = this.at(this.span[1]);
    c.fillStyle = "#ffffff";
    c.fillRect(a, low + 2, Math.max(2, b - a), 3);
  }

  close() {
    this.watcher.disconnect();
    clearTimeout(this.telling);
  }
}

// Size of the reader's text against the usual 16 px. Asking for it makes the browser work out all styles, so the
// answer is kept for half a second.
let known = 1, asked = -1e9;
export function rootScale() {
  const now = performance.now();
  if (now - asked > 500) {
    known = Math.min(2, parseFloat(getComputedStyle(document.documentElement).fontSize) / 16);
    asked = now;
  }
  return known;
}

export function hatch(c, x, y, width, height, colour, step = 7) {
  c.save();
  c.beginPath();
  c.rect(x, y, width, height);
  c.clip();
  c.strokeStyle = colour;
  c.lineWidth = 1;
  c.beginPath();
  for (let k = x - height; k < x + width; k += step) { c.moveTo(k, y + height); c.lineTo(k + height, y); }
  c.stroke();
  c.restore();
}
