// Axes of a plot on a canvas: nice ticks, labels with units, a frame.

import { rootScale } from "./timebar.js";

export const INK = "#1b2a31", SOFT = "#5a686e", GRID = "#e3e7e4";

export function ticks(low, high, wish = 6) {
  if (!(high > low)) return [low];
  const raw = (high - low) / wish, power = 10 ** Math.floor(Math.log10(raw));
  const step = [1, 2, 2.5, 5, 10].map((k) => k * power).find((k) => k >= raw * 0.999);
  const made = [];
  for (let k = Math.ceil(low / step - 1e-9); k * step <= high + 1e-9 * step; k++) made.push(Math.abs(k * step) < step * 1e-9 ? 0 : k * step);
  return made;
}

export class Axes {
  // `area` = {left, top, right, bottom} in css px; `x` and `y` = [low, high].
  constructor(context, area, x, y) {
    Object.assign(this, { context, area, x, y });
  }

  px(value) { return this.area.left + ((value - this.x[0]) / (this.x[1] - this.x[0])) * (this.area.right - this.area.left); }
  py(value) { return this.area.bottom - ((value - this.y[0]) / (this.y[1] - this.y[0])) * (this.area.bottom - this.area.top); }
  valueX(px) { return this.x[0] + ((px - this.area.left) / (this.area.right - this.area.left)) * (this.x[1] - this.x[0]); }

  frame({ xLabel, yLabel, xTicks, yTicks, xText = String, yText = String, grid = true }) {
    const c = this.context, { left, top, right, bottom } = this.area, size = fontSize();
    c.font = `${size}px system-ui, sans-serif`;
    c.lineWidth = 1;
    c.textBaseline = "middle";
    for (const t of yTicks) {
      const y = Math.round(this.py(t)) + 0.5;
      if (grid) { c.strokeStyle = GRID; line(c, left, y, right, y); }
      c.fillStyle = SOFT;
      c.textAlign = "right";
      c.fillText(tidy(yText(t)), left - 5, y);
    }
    c.textAlign = "center";
    c.textBaseline = "top";
    // The label stands in the row of the ticks at its right end; a tick that would meet it has no number.
    const room = xLabel ? right - c.measureText(xLabel).width - size * 1.6 : right + 99;
    for (const t of xTicks) {
      const x = Math.round(this.px(t)) + 0.5;
      c.strokeStyle = "#9aa5a6";
      line(c, x, bottom, x, bottom + 4);
      c.fillStyle = SOFT;
      if (xLabel !== null && x < room) c.fillText(tidy(xText(t)), x, bottom + 5);
    }
    c.strokeStyle = "#9aa5a6";
    c.strokeRect(left + 0.5, top + 0.5, right - left, bottom - top);
    c.fillStyle = INK;
    if (xLabel) { c.textAlign = "right"; c.fillText(xLabel, right, bottom + 5); }
    c.save();
    c.translate(size * 0.35, (top + bottom) / 2);
    c.rotate(-Math.PI / 2);
    c.textAlign = "center";
    c.fillText(yLabel, 0, 0);
    c.restore();
    c.textBaseline = "alphabetic";
    c.textAlign = "left";
  }

  clip(draw) {
    const { left, top, right, bottom } = this.area, c = this.context;
    c.save();
    c.beginPath();
    c.rect(left, top, right - left, bottom - top);
    c.clip();
    draw(c);
    c.restore();
  }
}

export const fontSize = () => Math.round(11 * rootScale());
const tidy = (text) => text.replace("-", "\u2212");

export function line(c, x0, y0, x1, y1) {
  c.beginPath();
  c.moveTo(x0, y0);
  c.lineTo(x1, y1);
  c.stroke();
}
