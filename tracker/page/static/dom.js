// Small helpers: elements, numbers in words, notices, dialogs. Text always goes in as text, never as markup.

export function el(tag, props = {}, ...children) {
  const node = document.createElement(tag);
  for (const [name, value] of Object.entries(props)) {
    if (value === undefined || value === null || value === false) continue;
    if (name.startsWith("on")) node.addEventListener(name.slice(2), value);
    else if (name === "class") node.className = value;
    else if (name in node && !name.startsWith("aria") && name !== "list" && name !== "role") node[name] = value;
    else node.setAttribute(name, value === true ? "" : value);
  }
  node.append(...children.flat().filter((child) => child !== null && child !== undefined && child !== false));
  return node;
}

export function svg(tag, attributes, ...children) {
  const node = document.createElementNS("http://www.w3.org/2000/svg", tag);
  for (const [name, value] of Object.entries(attributes)) node.setAttribute(name, value);
  node.append(...children);
  return node;
}

const minus = (text) => text.replace("-", "\u2212");

// 1.234(56) style: the uncertainty in units of the last digits shown, two digits of it.
export function withDoubt(value, std, factor = 1) {
  if (value === null || value === undefined) return "";
  const v = value * factor, s = std === null || std === undefined ? 0 : Math.abs(std * factor);
  if (!(s > 0)) return minus(Number(v.toPrecision(4)).toString());
  let digits = Math.max(0, Math.min(9, 1 - Math.floor(Math.log10(s))));
  if (digits > 0 && Math.round(s * 10 ** digits) >= 100) digits -= 1;
  const doubt = digits > 0 ? Math.round(s * 10 ** digits) : Math.round(s);
  return minus(`${v.toFixed(digits)}(${doubt})`);
}

export const fixed = (value, digits) => (value === null || value === undefined ? "" : minus(value.toFixed(digits)));

export function signed(value) {
  return value === null || value === undefined ? "" : value > 0 ? `+${value}` : minus(String(value));
}

// A message as a sentence: a capital first, unless it begins with a name, and a full stop last.
export const sentence = (text) => text.replace(/^[a-z]+(?= )/, (word) => word[0].toUpperCase() + word.slice(1)).replace(/[^.!?\u2026]$/, "$&.");

export function bytes(size) {
  return size > 1e9 ? `${(size / 1e9).toFixed(1)} GB` : size > 1e6 ? `${(size / 1e6).toFixed(1)} MB` : `${Math.ceil(size / 1e3)} kB`;
}

export const LETTER = { keep: "K", doubt: "D", reject: "R" };

// The same three shapes as in the picture: circle, square, cross.
export function verdictShape(verdict) {
  const line = { fill: "none", stroke: "currentColor", "stroke-width": 2.4 };
  const shape = svg("svg", { viewBox: "0 0 20 20", "aria-hidden": "true" });
  if (verdict === "keep") shape.append(svg("circle", { cx: 10, cy: 10, r: 7, ...line }));
  else if (verdict === "doubt") shape.append(svg("rect", { x: 3.5, y: 3.5, width: 13, height: 13, ...line }));
  else shape.append(svg("path", { d: "M3 3L8 8M12 12L17 17M17 3L12 8M8 12L3 17", ...line }));
  shape.setAttribute("class", `shape ${verdict}`);
  return shape;
}

export function verdictMark(verdict, byHand = false) {
  return el("span", { class: `verdict ${verdict}` }, verdictShape(verdict), verdict,
    byHand ? el("span", { class: "hand", title: "decided by a person" }, "by hand") : null);
}

export function notice(text, { bad = false, key = text, action = null } = {}) {
  const box = document.getElementById("notices");
  for (const old of box.children) if (old.dataset.key === key) old.remove();
  const close = el("button", { class: "quiet", type: "button", onclick: () => node.remove() }, "Close");
  const node = el("div", { class: bad ? "notice bad" : "notice" }, el("span", {}, text), action, close);
  node.dataset.key = key;
  box.append(node);
  return node;
}

export function clearNotice(key) {
  for (const old of [...document.getElementById("notices").children]) if (old.dataset.key === key) old.remove();
}

export const complain = (error) => notice(error.message, { bad: true });

export function showDialog(title, content, buttons = []) {
  const heading = el("h2", { id: "dialog-title" }, title);
  const close = el("button", { type: "button", onclick: () => dialog.close() }, "Close");
  const dialog = el("dialog", { "aria-labelledby": "dialog-title" }, heading, ...content, el("div", { class: "row end" }, ...buttons, close));
  dialog.addEventListener("close", () => dialog.remove());
  document.body.append(dialog);
  dialog.showModal();
  return dialog;
}

// A canvas that fills its box at the resolution of the screen; `draw(context, width, height)` in css pixels.
export function fitCanvas(canvas) {
  const ratio = window.devicePixelRatio || 1;
  const width = canvas.clientWidth, height = canvas.clientHeight;
  const w = Math.max(1, Math.round(width * ratio)), h = Math.max(1, Math.round(height * ratio));
  if (canvas.width !== w) canvas.width = w;
  if (canvas.height !== h) canvas.height = h;
  const context = canvas.getContext("2d");
  context.setTransform(ratio, 0, 0, ratio, 0, 0);
  context.clearRect(0, 0, width, height);
  return { context, width, height };
}

export const rem = () => parseFloat(getComputedStyle(document.documentElement).fontSize);
