// Keys: what they do, shown in a dialog, and a switch for those of a single letter.

import { el, showDialog } from "./dom.js";

const KEYS = [
  ["Space", "play and pause"], ["\u2190, \u2192", "one frame back, on; with Shift ten"], ["Page Up, Page Down", "fifty frames back, on (on the picture)"], ["Home, End", "first, last frame"],
  ["\u2191, \u2193", "droplet above, below in the table"], ["+, \u2212, 0", "zoom in, out, whole picture"], ["Alt + arrows", "move the view"], ["T", "tracks on and off"], ["B", "background on and off"],
  ["A, D, X", "accept, doubt, reject the chosen droplet"], ["S, [, ]", "split here, trim before, trim after"], ["U", "undo the last decision"], ["R", "write the reason"], ["P, N", "previous, next recording"], ["E", "export"], ["?", "this list"],
];

export let lettersOn = true;

export function showKeys() {
  const box = el("input", { type: "checkbox", id: "letters", checked: lettersOn, onchange: () => { lettersOn = box.checked; } });
  showDialog("Keys", [
    el("dl", { class: "keylist" }, ...KEYS.flatMap(([key, text]) => [el("dt", {}, ...key.split(", ").flatMap((name) => [el("kbd", {}, name), " "])), el("dd", {}, text)])),
    el("p", {}, box, " ", el("label", { htmlFor: "letters" }, "Keys of one letter or sign work")),
    el("p", { class: "soft" }, "Verdicts are told by shape as well as colour: circle = keep, square = doubt, cross = reject. In the picture the wheel zooms and dragging moves the view."),
  ]);
}
