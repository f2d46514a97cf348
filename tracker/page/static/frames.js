// Pictures of one recording: the nearest wanted one as soon as possible, half size while moving, full at rest.

const AT_ONCE = 4;      // requests under way
const AHEAD = 8;        // frames fetched before they are asked for
const BITMAPS = 80;     // decoded pictures kept
const REST = 120;       // ms without a move before the full picture is fetched

export class Frames {
  // `show(frame, bitmap, half)` draws; it is called with null for a picture that cannot be had.
  constructor(base, show) {
    this.base = base;
    this.show = show;
    this.ready = 0;          // frames that the server can give
    this.clear = false;      // what stands still taken away
    this.wanted = 0;
    this.shown = -1;
    this.step = 1;           // the last move
    this.bitmaps = new Map();
    this.blobs = new Map();
    this.waiting = new Map();
    this.rest = 0;
    this.closed = false;
  }

  key(frame, half) { return `${half ? "half" : "full"}${this.clear ? "-clear" : ""}/${frame}`; }

  want(frame) {
    // Frames are fetched ahead in the strides of the movement: in a fast drag its neighbours would come too late.
    if (frame !== this.wanted) this.step = frame - this.wanted;
    this.wanted = frame;
    clearTimeout(this.rest);
    this.rest = setTimeout(() => this.load(this.wanted, false), REST);
    const held = this.bitmaps.get(this.key(frame, false)) || this.bitmaps.get(this.key(frame, true));
    if (held) this.put(frame, held, !this.bitmaps.has(this.key(frame, false)));
    else if (frame >= this.ready) this.put(frame, null, true);
    this.pump();
  }

  put(frame, bitmap, half) {
    this.shown = frame;
    this.show(frame, bitmap, half);
  }

  pump() {
    const ahead = Math.abs(this.step) > 20 ? 0 : AHEAD;
    for (let k = 0; k <= ahead && this.waiting.size < AT_ONCE; k++) {
      const frame = this.wanted + k * this.step;
      if (frame >= 0 && frame < this.ready && !this.bitmaps.has(this.key(frame, false))) this.load(frame, true);
    }
  }

  async load(frame, half) {
    const key = this.key(frame, half);
    if (this.closed || frame >= this.ready || this.waiting.has(key)) return;
    if (this.bitmaps.has(key)) { this.arrived(frame, key, half); return; }
    this.waiting.set(key, frame);
    try {
      let blob = this.blobs.get(key);
      if (!blob) {
        const response = await fetch(`${this.base}/${key}.jpg`, { credentials: "same-origin" });
        if (!response.ok) throw new Error(`status ${response.status}`);
        blob = await response.blob();
        if (half) this.keepBlob(key, blob);
      }
      this.keep(key, await createImageBitmap(blob));
      this.failed = 0;
    } catch {
      this.failed = (this.failed || 0) + 1;
      if (!half && !this.closed && frame === this.wanted && this.shown !== frame) this.put(frame, null, true);
    }
    this.waiting.delete(key);
    if (!this.closed) {
      this.arrived(frame, key, half);
      if (!(this.failed > 3)) this.pump();
    }
  }

  arrived(frame, key, half) {
    const bitmap = this.bitmaps.get(key);
    if (!bitmap || key !== this.key(frame, half)) return;
    if (!half) { if (frame === this.wanted) this.put(frame, bitmap, false); return; }
    const better = Math.abs(frame - this.wanted) < Math.abs(this.shown - this.wanted);
    if (better || (frame === this.wanted && this.lacks)) this.put(frame, bitmap, true);
  }

  keepBlob(key, blob) {
    this.blobs.set(key, blob);
    if (this.blobs.size > 2500) this.blobs.delete(this.blobs.keys().next().value);
  }

  keep(key, bitmap) {
    this.bitmaps.set(key, bitmap);
    if (this.bitmaps.size <= BITMAPS) return;
    for (const [old, picture] of this.bitmaps) {
      if (old === this.key(this.shown, true) || old === this.key(this.shown, false)) continue;
      this.bitmaps.delete(old);
      picture.close();
      break;
    }
  }

  again() {
    this.failed = 0;
    this.shown = -1;
    this.want(this.wanted);
  }

  close() {
    this.closed = true;
    clearTimeout(this.rest);
    for (const picture of this.bitmaps.values()) picture.close();
    this.bitmaps.clear();
    this.blobs.clear();
  }
}
