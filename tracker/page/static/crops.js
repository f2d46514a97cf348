// Small pictures of the chosen droplet through time, cut out of the full frames around its place.

import { el } from "./dom.js";

const COUNT = 24, SIDE = 32;   // pictures, and image pixels along a side

export async function fillCrops(box, { track, times, url, ready, onFrame, stillWanted }) {
  box.replaceChildren();
  const rows = track.frame.length, picked = [];
  for (let k = 0; k < Math.min(COUNT, rows); k++) picked.push(Math.round((k * (rows - 1)) / Math.max(1, Math.min(COUNT, rows) - 1)));
  const made = picked.map((row) => {
    const canvas = el("canvas", { width: SIDE * 4, height: SIDE * 4 });
    const frame = track.frame[row], left = track.used[row] ? "" : ", left out";
    const button = el("button", { type: "button", onclick: () => onFrame(frame) }, canvas, el("span", {}, `${times[frame].toFixed(2)} s${track.used[row] ? "" : " \u2715"}`));
    button.setAttribute("aria-label", `droplet at ${times[frame].toFixed(2)} seconds, frame ${frame}${left}`);
    button.dataset.frame = frame;
    box.append(button);
    return { row, frame, canvas };
  });
  for (const { row, frame, canvas } of made) {
    if (!stillWanted()) return;
    if (frame >= ready()) continue;
    try {
      const response = await fetch(url(frame), { credentials: "same-origin" });
      if (!response.ok) continue;
      const picture = await createImageBitmap(await response.blob());
      const context = canvas.getContext("2d");
      context.imageSmoothingEnabled = false;
      const scale = canvas.width / SIDE;
      // The droplet's centre, half a pixel in, comes to the middle.
      context.setTransform(scale, 0, 0, scale, canvas.width / 2 - (track.x[row] + 0.5) * scale, canvas.height / 2 - (track.y[row] + 0.5) * scale);
      context.drawImage(picture, 0, 0);
      picture.close();
    } catch { /* a picture that cannot be had stays dark */ }
  }
}

export function markCrop(box, frame) {
  let best = null;
  for (const button of box.children) {
    button.setAttribute("aria-current", "false");
    if (best === null || Math.abs(button.dataset.frame - frame) < Math.abs(best.dataset.frame - frame)) best = button;
  }
  if (best) best.setAttribute("aria-current", "true");
}
