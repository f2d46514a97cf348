// The plots of one droplet and of one recording. Each has a sentence with the same content for screen readers.

import { Axes, INK, SOFT, fontSize, line, ticks } from "./axes.js";
import { fitCanvas } from "./dom.js";
import { drawShape } from "./stage.js";
import { hatch, volts } from "./timebar.js";

const ON = "#cfe6e6", REVERSED = "#efe0c6", FIT = "#b4541f", POINT = "#20303a";

function shade(axes, segments, labels) {
  const c = axes.context, { left, right, top, bottom } = axes.area;
  for (const s of segments) {
    const a = Math.max(left, axes.px(s.start)), b = Math.min(right, axes.px(s.end));
    if (b <= a) continue;
    if (s.way !== 0) {
      c.fillStyle = s.way > 0 ? ON : REVERSED;
      c.fillRect(a, top, b - a, bottom - top);
      if (s.way < 0) hatch(c, a, top, b - a, bottom - top, "rgba(120,90,40,.16)", 9);
    }
    if (!labels) continue;
    c.font = `${fontSize()}px system-ui, sans-serif`;
    c.fillStyle = SOFT;
    const text = [volts(s), volts(s).replace(" V", ""), s.way > 0 ? "+" : s.way < 0 ? "\u2212" : "0"].find((t) => c.measureText(t).width < b - a - 3);
    if (text) c.fillText(text, a + 3, top + fontSize() + 2);
  }
}

function span(values, margin = 0.06) {
  let low = Infinity, high = -Infinity;
  for (const v of values) if (v !== null && Number.isFinite(v)) { low = Math.min(low, v); high = Math.max(high, v); }
  if (!(high >= low)) return [0, 1];
  const room = (high - low || Math.abs(high) || 1) * margin;
  return [low - room, high + room];
}

// Height against time above, residuals in units of their standard deviation below.
export class MotionPlot {
  constructor(canvas, { onScrub }) {
    this.canvas = canvas;
    this.still = document.createElement("canvas");
    this.onScrub = onScrub;
    canvas.addEventListener("pointerdown", (event) => { canvas.setPointerCapture(event.pointerId); this.dragging = true; this.scrub(event); });
    canvas.addEventListener("pointermove", (event) => { if (this.dragging) this.scrub(event); });
    canvas.addEventListener("pointerup", () => { this.dragging = false; });
  }

  scrub(event) {
    if (this.upper) this.onScrub(this.upper.valueX(event.clientX - this.canvas.getBoundingClientRect().left));
  }

  // All but the cursor is drawn once for each droplet and size, and copied while the time moves.
  draw(detail, time) {
    const ratio = window.devicePixelRatio || 1, { clientWidth: width, clientHeight: height } = this.canvas;
    const key = [detail, detail?.residual, width, height, ratio, fontSize()];
    if (!this.key || key.some((part, i) => part !== this.key[i])) {
      const { context } = fitCanvas(this.canvas);
      this.upper = null;
      if (detail && width >= 60) this.drawStill(context, width, height, detail);
      Object.assign(this.still, { width: this.canvas.width, height: this.canvas.height });
      this.still.getContext("2d").drawImage(this.canvas, 0, 0);
      this.key = key;
    }
    const c = this.canvas.getContext("2d");
    c.setTransform(1, 0, 0, 1, 0, 0);
    c.clearRect(0, 0, this.canvas.width, this.canvas.height);
    c.drawImage(this.still, 0, 0);
    c.setTransform(ratio, 0, 0, ratio, 0, 0);
    if (!this.upper || time === null || time < this.upper.x[0] || time > this.upper.x[1]) return;
    c.strokeStyle = INK;
    c.lineWidth = 1.2;
    line(c, this.upper.px(time), this.upper.area.top, this.upper.px(time), this.bottom);
  }

  drawStill(c, width, height, detail) {
    const size = fontSize(), left = size * 4.6, right = width - 10, bottom = height - size * 1.9, gap = 8;
    const cut = Math.round(10 + (bottom - 10) * 0.64);
    const x = span(detail.time, 0.02);
    // The segments' names stand in a strip of their own above the heights.
    const [least, most] = span(detail.height), strip = (size + 8) / (cut - 8);
    const upper = new Axes(c, { left, top: 8, right, bottom: cut }, x, [least, most + (most - least) * strip / (1 - strip)]);
    const lower = new Axes(c, { left, top: cut + gap, right, bottom }, x, [-4.4, 4.4]);
    this.upper = upper;
    this.bottom = bottom;
    for (const axes of [upper, lower]) shade(axes, detail.segments, axes === upper);
    const xTicks = ticks(...x, Math.max(3, width / 90));
    upper.frame({ xLabel: null, yLabel: "height / \u00b5m", xTicks, yTicks: ticks(...upper.y, 5) });
    lower.frame({ xLabel: "time / s", yLabel: "residual / \u03c3", xTicks, yTicks: [-3, 0, 3] });
    upper.clip(() => this.drawHeights(c, upper, detail));
    lower.clip(() => this.drawResiduals(c, lower, detail));
    c.setLineDash([6, 3]);
    c.strokeStyle = "#6b2a86";
    c.lineWidth = 1.5;
    for (const change of detail.changes) if (change.time !== null) line(c, upper.px(change.time), upper.area.top, upper.px(change.time), bottom);
    c.setLineDash([]);
  }

  drawHeights(c, axes, detail) {
    c.strokeStyle = FIT;
    c.globalAlpha = 0.55;
    c.lineWidth = 4;
    for (const f of detail.fits) line(c, axes.px(f.start), axes.py(f.from), axes.px(f.end), axes.py(f.to));
    c.globalAlpha = 1;
    c.fillStyle = POINT;
    for (let i = 0; i < detail.time.length; i++) {
      const x = axes.px(detail.time[i]), y = axes.py(detail.height[i]);
      if (detail.used[i]) c.fillRect(x - 0.8, y - 0.8, 1.6, 1.6);
      else { c.strokeStyle = "#9b2330"; c.lineWidth = 1.1; line(c, x - 2.6, y - 2.6, x + 2.6, y + 2.6); line(c, x - 2.6, y + 2.6, x + 2.6, y - 2.6); }
    }
  }

  drawResiduals(c, axes, detail) {
    c.setLineDash([4, 4]);
    c.strokeStyle = SOFT;
    c.lineWidth = 1;
    for (const level of [-3, 3]) line(c, axes.area.left, axes.py(level), axes.area.right, axes.py(level));
    c.setLineDash([]);
    line(c, axes.area.left, axes.py(0), axes.area.right, axes.py(0));
    const { residual_time: times, residual } = detail;
    for (let i = 0; i < residual.length; i++) {
      const x = axes.px(times[i]), z = residual[i];
      c.fillStyle = Math.abs(z) > 3 ? "#9b2330" : POINT;
      if (Math.abs(z) > 4.4) {   // beyond the axis: an arrow head at its edge
        const y = z > 0 ? axes.area.top + 2 : axes.area.bottom - 2, way = z > 0 ? 6 : -6;
        c.beginPath(); c.moveTo(x, y); c.lineTo(x - 4, y + way); c.lineTo(x + 4, y + way); c.fill();
      } else if (Math.abs(z) > 3) c.fillRect(x - 2, axes.py(z) - 2, 4, 4);
      else c.fillRect(x - 0.9, axes.py(z) - 0.9, 1.8, 1.8);
    }
  }
}

// How probable each whole number of elementary charges is.
export function drawNumbers(canvas, numbers) {
  const { context: c, width, height } = fitCanvas(canvas);
  if (!numbers || !numbers.n.length || width < 60) return;
  const size = fontSize(), area = { left: size * 4.2, top: 10, right: width - 10, bottom: height - size * 1.9 };
  const first = numbers.n[0] - 0.6, last = numbers.n[numbers.n.length - 1] + 0.6;
  const axes = new Axes(c, area, [first, last], [0, 1.3]);
  const every = Math.max(1, Math.ceil(numbers.n.length / (width / 34)));
  axes.frame({ xLabel: "charge number", yLabel: "probability", yTicks: [0, 0.25, 0.5, 0.75, 1],
    xTicks: numbers.n.filter((n) => n % every === 0), xText: (n) => (n > 0 ? `+${n}` : String(n)) });
  const best = numbers.p.indexOf(Math.max(...numbers.p)), half = Math.min(18, 0.36 * (axes.px(1) - axes.px(0)));
  numbers.n.forEach((n, i) => {
    const y = axes.py(numbers.p[i]);
    c.fillStyle = i === best ? "#0f5663" : "#9fb9bc";
    c.fillRect(axes.px(n) - half, y, 2 * half, axes.py(0) - y);
    if (numbers.p[i] < 0.005) return;
    c.fillStyle = INK;
    c.textAlign = "center";
    c.fillText(numbers.p[i] > 0.995 ? (numbers.p[i] >= 0.9995 ? "> 0.999" : numbers.p[i].toFixed(3)) : numbers.p[i].toFixed(2), axes.px(n), y - 3);
  });
  if (numbers.charge !== null) {
    c.strokeStyle = FIT;
    c.lineWidth = 2;
    const y = axes.py(1.22);
    line(c, axes.px(numbers.charge - numbers.std), y, axes.px(numbers.charge + numbers.std), y);
    c.fillStyle = FIT;
    c.beginPath(); c.arc(axes.px(numbers.charge), y, 4, 0, 7); c.fill();
  }
  c.textAlign = "left";
}

// All charges of the recording over the charge unit that they show, or over e where none is resolved.
export class ChargesPlot {
  constructor(canvas, { onChoose }) {
    this.canvas = canvas;
    this.places = [];
    canvas.addEventListener("click", (event) => {
      const rect = canvas.getBoundingClientRect(), x = event.clientX - rect.left, y = event.clientY - rect.top;
      let best = null, distance = 14;
      for (const p of this.places) { const d = Math.hypot(p.x - x, p.y - y); if (d < distance) { best = p.droplet; distance = d; } }
      if (best !== null) onChoose(best);
    });
  }

  draw(droplets, { charge_unit: unit, charge_unit_name: name }, chosen) {
    const { context: c, width, height } = fitCanvas(this.canvas);
    if (width < 60) return;
    const shown = droplets.filter((d) => d.charge_c !== null).map((d) => ({ ...d, q: d.charge_c / unit, s: d.charge_own_std_c / unit }))
      .sort((a, b) => a.q - b.q);
    this.places = [];
    const size = fontSize(), area = { left: size * 4.2, top: 8, right: width - 10, bottom: height - size * 1.9 };
    const y = span(shown.flatMap((d) => [Math.max(d.q - d.s, d.q - 3), Math.min(d.q + d.s, d.q + 3)]).concat([0]));
    const axes = new Axes(c, area, [-0.7, Math.max(1, shown.length) - 0.3], y);
    const comb = ticks(...y, Math.min(30, (area.bottom - area.top) / (1.5 * size))).filter(Number.isInteger);
    axes.frame({ xLabel: "droplets, ordered by charge", yLabel: `charge / ${name}`, xTicks: [], yTicks: comb, yText: (n) => (n > 0 ? `+${n}` : String(n)) });
    axes.clip(() => shown.forEach((d, i) => {
      const x = axes.px(i), py = axes.py(d.q);
      this.places.push({ x, y: py, droplet: d.droplet });
      c.strokeStyle = { keep: "#14624a", doubt: "#7a4b00", reject: "#9b2330" }[d.verdict];
      c.lineWidth = 1.3;
      line(c, x, axes.py(d.q - d.s), x, axes.py(d.q + d.s));
      c.lineWidth = 1.8;
      drawShape(c, d.verdict, x, py, 4.5, d.droplet === chosen);
    }));
  }
}
