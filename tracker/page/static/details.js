// What is known of the chosen droplet and of all charges, in tabs below the table.

import { el, sentence } from "./dom.js";
import { get } from "./api.js";
import { fillCrops, markCrop } from "./crops.js";
import { ChargesPlot, MotionPlot, drawNumbers } from "./plots.js";
import { nearestFrame } from "./tracks.js";

const TABS = [["motion", "Motion"], ["number", "Charge number"], ["charges", "All charges"], ["crops", "Crops"], ["history", "History"]];

export class Details {
  constructor(box, view) {
    this.view = view;
    this.tab = "motion";
    this.frame = 0;
    this.detail = null;
    this.list = el("div", { class: "tabs", role: "tablist", "aria-label": "About the droplet" });
    this.tabs = TABS.map(([id, text]) => el("button", { type: "button", role: "tab", id: `tab-${id}`, "aria-controls": `panel-${id}`, onclick: () => this.open(id) }, text));
    this.list.append(...this.tabs);
    this.list.addEventListener("keydown", (event) => this.keys(event));
    box.append(this.list);
    this.panels = Object.fromEntries(TABS.map(([id]) => [id, el("div", { class: "panel", role: "tabpanel", id: `panel-${id}`, "aria-labelledby": `tab-${id}`, tabIndex: 0 })]));
    box.append(...Object.values(this.panels));
    const plot = (id, label) => {
      const canvas = el("canvas", { role: "img", "aria-label": label }), caption = el("p", { class: "caption" });
      this.panels[id].append(el("div", { class: "plot" }, canvas), caption);
      return [canvas, caption];
    };
    [this.motionCanvas, this.motionText] = plot("motion", "Height against time with fitted speeds, residuals below");
    [this.numberCanvas, this.numberText] = plot("number", "Probability of each charge number");
    [this.chargesCanvas, this.chargesText] = plot("charges", "Charges of all droplets over the charge unit");
    this.motion = new MotionPlot(this.motionCanvas, { onScrub: (time) => view.player.go(nearestFrame(view.result.times, time)) });
    this.charges = new ChargesPlot(this.chargesCanvas, { onChoose: (d) => view.choose(d) });
    this.cropBox = el("div", { class: "crops" });
    this.panels.crops.append(this.cropBox);
    this.watcher = new ResizeObserver(() => this.draw());
    for (const canvas of [this.motionCanvas, this.numberCanvas, this.chargesCanvas]) this.watcher.observe(canvas);
    this.open("motion");
  }

  open(id) {
    this.tab = id;
    TABS.forEach(([name], i) => {
      this.tabs[i].setAttribute("aria-selected", String(name === id));
      this.tabs[i].tabIndex = name === id ? 0 : -1;
      this.panels[name].hidden = name !== id;
    });
    if (id === "crops") this.crops();
    this.draw();
  }

  keys(event) {
    const at = TABS.findIndex(([name]) => name === this.tab);
    const to = { ArrowRight: at + 1, ArrowLeft: at - 1, Home: 0, End: TABS.length - 1 }[event.key];
    if (to === undefined) return;
    event.preventDefault();
    event.stopPropagation();
    const next = (to + TABS.length) % TABS.length;
    this.open(TABS[next][0]);
    this.tabs[next].focus();
  }

  setResult() {
    this.fillHistory();
    const r = this.view.result;
    this.chargesText.textContent = `${r.charge_unit_text} Bars: own uncertainty.`;
    this.draw();
  }

  // Heights come at once; residuals and charge numbers need the fits of all droplets and come when these are done.
  async setDroplet(droplet) {
    const revision = this.view.result.revision, here = `/api/results/${this.view.id}/droplets/${droplet}`;
    const current = () => this.wanted === droplet && !this.view.closed && this.view.result.revision === revision;
    this.wanted = droplet;
    this.cropsOf = null;
    if (this.tab === "crops") this.crops();
    let said = "";
    try {
      const detail = await get(`${here}?revision=${revision}`);
      if (!current()) return;
      const before = this.detail?.droplet === droplet ? this.detail : { residual_time: [], residual: [] };
      this.detail = { ...detail, residual_time: before.residual_time, residual: before.residual };
      if (before.droplet !== droplet) {
        this.numbers = null;
        this.panels.number.classList.add("empty");
      }
      said = detail.text;
      this.motionText.textContent = said;
      this.numberText.textContent = "Being worked out \u2026";
      this.draw();
      const fits = await get(`${here}/fits?revision=${revision}`);
      if (!current()) return;
      Object.assign(this.detail, { residual_time: fits.residual_time, residual: fits.residual });
      this.numbers = fits.numbers;
      this.panels.number.classList.toggle("empty", !fits.numbers);
      this.motionText.textContent = `${said} ${fits.residual_text}`;
      this.numberText.textContent = fits.number_text;
      this.draw();
    } catch (error) {
      if (!current() || error.status === 409) return;
      this.motionText.textContent = `${said} No residuals: ${error.message}`;
      this.numberText.textContent = error.message;
    }
  }

  setTime(frame) {
    if (frame === this.frame && !this.due) return;
    this.frame = frame;
    if (this.tab === "crops") markCrop(this.cropBox, frame);
    if (this.tab !== "motion" || this.due) return;
    // While the picture moves the plot follows ten times a second: drawing it for each frame would slow the picture.
    this.due = setTimeout(() => { this.due = 0; this.draw(); }, 100);
  }

  setPack() { if (this.tab === "crops") this.crops(); }

  draw() {
    const { result, chosen } = this.view;
    if (!result) return;
    if (this.tab === "motion") this.motion.draw(this.detail, result.times[this.frame] ?? null);
    if (this.tab === "number") drawNumbers(this.numberCanvas, this.numbers);
    if (this.tab === "charges") this.charges.draw(result.droplets, result, chosen);
  }

  crops() {
    const { tracks, chosen, result, frames } = this.view, track = tracks?.get(chosen);
    if (!track || this.cropsOf === chosen) return;
    this.cropsOf = chosen;
    fillCrops(this.cropBox, {
      track, times: result.times, ready: () => frames.ready,
      url: (frame) => `${frames.base}/full${frames.clear ? "-clear" : ""}/${frame}.jpg`,
      onFrame: (frame) => { this.view.player.stop(); this.view.player.go(frame); },
      stillWanted: () => this.cropsOf === chosen && !this.view.closed,
    }).then(() => markCrop(this.cropBox, this.frame));
  }

  fillHistory() {
    const { decisions, warnings } = this.view.result;
    const items = decisions.map((d) => el("li", { class: d.undone ? "undone" : "" },
      el("span", { class: "num" }, d.time), " \u00b7 ", el("b", {}, d.what), d.reason ? `: ${d.reason}` : "", d.undone ? " (taken back)" : "", d.lost ? " (its track is no longer found)" : ""));
    const told = warnings.length ? el("ul", { class: "history" }, ...warnings.map((text) => el("li", {}, sentence(text)))) : "";
    this.panels.history.replaceChildren(warnings.length ? el("h3", { class: "caption" }, "Warnings of this recording") : "", told, el("h3", { class: "caption" }, "Decisions"), items.length ? el("ol", { class: "history", reversed: true }, ...items.reverse()) : el("p", { class: "caption" }, "No decisions yet. They are kept in decisions.jsonl, appended, never rewritten."));
  }

  close() {
    this.watcher.disconnect();
    clearTimeout(this.due);
  }
}
