// The picture with its tracks, both drawn on one canvas in one call, so that they never show two frames.
// Image points have the centre of the first pixel at (0, 0): on the screen it lies half a pixel in.

import { placeAt, rowAt } from "./tracks.js";
import { LETTER } from "./dom.js";
import { rootScale } from "./timebar.js";

// Okabe and Ito's palette, as in tracker/showing/overlay.py.
export const COLOURS = { keep: "#56b4e9", doubt: "#e69f00", reject: "#cc79a7" };
const MAX_ZOOM = 40;

export class Stage {
  constructor(box, { onChoose, onView }) {
    this.box = box;
    this.onChoose = onChoose;
    this.onView = onView;
    this.canvas = document.createElement("canvas");
    this.canvas.setAttribute("aria-hidden", "true");
    this.context = this.canvas.getContext("2d", { alpha: false });
    box.prepend(this.canvas);
    this.size = [1, 1];
    this.zoom = 1;                 // relative to the whole picture in view
    this.centre = null;            // image point in the middle of the box
    this.state = { frame: 0, bitmap: null, half: true };
    this.marks = true;
    this.trail = 30;
    this.tracks = new Map();
    this.verdicts = new Map();
    this.chosen = null;
    this.drag = null;
    this.watcher = new ResizeObserver(() => this.place());
    this.watcher.observe(box);
    box.addEventListener("pointerdown", (event) => this.down(event));
    box.addEventListener("pointermove", (event) => this.move(event));
    box.addEventListener("pointerup", (event) => this.up(event));
    box.addEventListener("pointercancel", () => { this.drag = null; });
    box.addEventListener("wheel", (event) => this.wheel(event), { passive: false });
  }

  setPicture(width, height) {
    this.size = [width, height];
    this.centre = [(width - 1) / 2, (height - 1) / 2];
    this.place();
  }

  // Whole-pixel place and size, in steps of 4 css px so that they are whole device pixels at usual ratios too:
  // else the browser snaps the layers and the marks lie beside the droplets.
  place() {
    const rect = this.box.getBoundingClientRect();
    const left = Math.ceil(rect.left / 4) * 4 - rect.left, top = Math.ceil(rect.top / 4) * 4 - rect.top;
    const width = Math.max(4, Math.floor((rect.width - left) / 4) * 4), height = Math.max(4, Math.floor((rect.height - top) / 4) * 4);
    const ratio = window.devicePixelRatio || 1;
    Object.assign(this.canvas.style, { left: `${left}px`, top: `${top}px`, width: `${width}px`, height: `${height}px` });
    this.canvas.width = Math.round(width * ratio);
    this.canvas.height = Math.round(height * ratio);
    this.width = width;
    this.height = height;
    this.draw();
  }

  get scale() { return this.zoom * Math.min(this.width / this.size[0], this.height / this.size[1]); }

  // css pixels in the canvas for an image point, and back: the only place where the half pixel is added.
  toScreen(x, y) {
    return [this.width / 2 + (x - this.centre[0]) * this.scale, this.height / 2 + (y - this.centre[1]) * this.scale];
  }

  toImage(sx, sy) {
    return [this.centre[0] + (sx - this.width / 2) / this.scale, this.centre[1] + (sy - this.height / 2) / this.scale];
  }

  pointer(event) {
    const rect = this.canvas.getBoundingClientRect();
    return [event.clientX - rect.left, event.clientY - rect.top];
  }

  // Brightness and contrast act on the picture alone where the browser can, else on the marks too.
  setLook(brightness, contrast) {
    const look = brightness === 1 && contrast === 1 ? "none" : `brightness(${brightness}) contrast(${contrast})`;
    if ("filter" in this.context) this.look = look === "none" ? null : look;
    else this.canvas.style.filter = look;
    this.draw();
  }

  zoomBy(factor, at = [this.width / 2, this.height / 2]) {
    const [x, y] = this.toImage(...at);
    this.zoom = Math.min(MAX_ZOOM, Math.max(1, this.zoom * factor));
    const scale = this.scale;
    this.centre = [x - (at[0] - this.width / 2) / scale, y - (at[1] - this.height / 2) / scale];
    this.keepInside();
  }

  panBy(dx, dy) {
    this.centre = [this.centre[0] + dx / this.scale, this.centre[1] + dy / this.scale];
    this.keepInside();
  }

  whole() {
    this.zoom = 1;
    this.keepInside();
  }

  lookAt(x, y) {
    if (this.zoom > 1) { this.centre = [x, y]; this.keepInside(); }
  }

  keepInside() {
    for (const axis of [0, 1]) {
      const room = (axis === 0 ? this.width : this.height) / this.scale, size = this.size[axis];
      const low = -0.5 + room / 2, high = size - 0.5 - room / 2;
      this.centre[axis] = low > high ? (size - 1) / 2 : Math.min(high, Math.max(low, this.centre[axis]));
    }
    this.draw();
    this.onView();
  }

  wheel(event) {
    event.preventDefault();
    this.zoomBy(Math.exp(-event.deltaY * (event.deltaMode === 1 ? 0.05 : 0.0016)), this.pointer(event));
  }

  down(event) {
    if (event.button !== 0) return;
    this.drag = { id: event.pointerId, from: [event.clientX, event.clientY], last: [event.clientX, event.clientY], moved: false };
    this.box.setPointerCapture(event.pointerId);
  }

  move(event) {
    if (!this.drag || event.pointerId !== this.drag.id) return;
    const [fx, fy] = this.drag.from, [lx, ly] = this.drag.last;
    if (Math.hypot(event.clientX - fx, event.clientY - fy) > 4) this.drag.moved = true;
    if (this.drag.moved && this.zoom > 1) this.panBy(lx - event.clientX, ly - event.clientY);
    this.drag.last = [event.clientX, event.clientY];
  }

  up(event) {
    const drag = this.drag;
    this.drag = null;
    if (!drag || drag.moved) return;
    const [x, y] = this.toImage(...this.pointer(event));
    this.lastClick = [x, y];
    const found = this.nearest(x, y);
    if (found !== null) this.onChoose(found);
  }

  // The droplet whose place in the shown frame is nearest, within 14 screen pixels.
  nearest(x, y) {
    let best = null, distance = 14 / this.scale + 3;
    for (const track of this.tracks.values()) {
      const place = placeAt(track, this.state.frame);
      const d = place ? Math.hypot(place.x - x, place.y - y) : Infinity;
      if (d < distance) { best = track.droplet; distance = d; }
    }
    return best;
  }

  show(frame, bitmap, half) {
    this.state = { frame, bitmap, half };
    if (this.due) return;
    this.due = true;
    requestAnimationFrame(() => { this.due = false; this.draw(); });
  }

  draw() {
    if (!this.centre || !this.width) return;
    const ratio = window.devicePixelRatio || 1, context = this.context;
    this.drawPicture(context, ratio);
    context.setTransform(ratio, 0, 0, ratio, 0, 0);
    if (this.marks) this.drawMarks(context);
    this.drawn = this.state.frame;
    if (this.onDrawn) this.onDrawn(this.state);
  }

  drawPicture(context, ratio) {
    const { bitmap, half } = this.state;
    context.setTransform(1, 0, 0, 1, 0, 0);
    context.fillStyle = "#10181c";
    context.fillRect(0, 0, this.canvas.width, this.canvas.height);
    const [left, top] = this.toScreen(-0.5, -0.5);
    context.setTransform(ratio * this.scale, 0, 0, ratio * this.scale, ratio * left, ratio * top);
    if (!bitmap) {
      context.fillStyle = "#26343a";
      context.fillRect(0, 0, this.size[0], this.size[1]);
      return;
    }
    context.imageSmoothingEnabled = this.scale * ratio < 4;
    const grow = half ? 2 : 1;
    if (this.look) context.filter = this.look;
    context.drawImage(bitmap, 0, 0, bitmap.width * grow, bitmap.height * grow);
    if (this.look) context.filter = "none";
  }

  drawMarks(context) {
    const frame = this.state.frame;
    context.lineJoin = "round";
    context.font = `600 ${Math.round(11 * rootScale())}px system-ui, sans-serif`;
    for (const track of this.tracks.values()) if (track.droplet !== this.chosen) this.drawOne(context, track, frame, false);
    const chosen = this.tracks.get(this.chosen);
    if (chosen) this.drawOne(context, chosen, frame, true);
  }

  drawOne(context, track, frame, chosen) {
    const verdict = this.verdicts.get(track.droplet) || "keep";
    const row = rowAt(track, frame);
    if (row < 0 || frame - track.frame[row] > this.trail) return;
    context.strokeStyle = context.fillStyle = COLOURS[verdict];
    context.lineWidth = chosen ? 2.6 : 1.4;
    this.drawTrail(context, track, row, frame, chosen);
    if (track.frame[row] !== frame) return;
    const [sx, sy] = this.toScreen(track.x[row], track.y[row]);
    const radius = Math.max(8, 9 * Math.min(this.scale, 6));
    drawShape(context, verdict, sx, sy, radius, chosen);
    if (chosen || this.scale > 1.6) {
      context.globalAlpha = 1;
      context.fillText(`${track.droplet} ${LETTER[verdict]}`, sx + radius + 3, sy - radius + 2);
    }
  }

  drawTrail(context, track, row, frame, chosen) {
    context.setLineDash([]);
    context.globalAlpha = chosen ? 0.9 : 0.55;
    context.beginPath();
    let first = true;
    for (let i = Math.max(0, rowAt(track, frame - this.trail - 1) + 1); i <= row; i++) {
      const [sx, sy] = this.toScreen(track.x[i], track.y[i]);
      if (first) context.moveTo(sx, sy);
      else context.lineTo(sx, sy);
      first = false;
    }
    context.stroke();
    context.globalAlpha = 1;
  }

  close() { this.watcher.disconnect(); }
}

// Circle = keep, square = doubt, diagonal cross = reject, as in pictures that fallrise draws itself; the chosen
// one has four ticks around it.
export function drawShape(context, verdict, sx, sy, arm, chosen) {
  context.setLineDash([]);
  context.beginPath();
  if (verdict === "keep") context.arc(sx, sy, arm, 0, 2 * Math.PI);
  else if (verdict === "doubt") context.rect(sx - arm, sy - arm, 2 * arm, 2 * arm);
  else {
    for (const [a, b] of [[1, 1], [1, -1], [-1, 1], [-1, -1]]) {
      context.moveTo(sx + a * arm / 3, sy + b * arm / 3);
      context.lineTo(sx + a * arm, sy + b * arm);
    }
  }
  if (chosen) {
    for (const [a, b] of [[1, 0], [-1, 0], [0, 1], [0, -1]]) {
      context.moveTo(sx + a * (arm + 4), sy + b * (arm + 4));
      context.lineTo(sx + a * (arm + 11), sy + b * (arm + 11));
    }
  }
  context.stroke();
}
