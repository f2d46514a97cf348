// The view of one result: watch on the left, judge on the right.

import { clearNotice, complain, el, fixed, notice, signed, verdictMark, withDoubt } from "./dom.js";
import { get, post } from "./api.js";
import { Frames } from "./frames.js";
import { Judge } from "./judge.js";
import { Player } from "./player.js";
import { Stage } from "./stage.js";
import { DropletTable } from "./table.js";
import { TimeBar } from "./timebar.js";
import { Details } from "./details.js";
import { readTracks, rowAt } from "./tracks.js";
import { exportMenu } from "./exporting.js";

export class InspectView {
  constructor(main, id, { shelf, wantDroplet, tools, trail }) {
    Object.assign(this, { main, id, shelf, wantDroplet, tools, trail });
    this.reasons = shelf.reasons;
    this.chosen = null;
    this.closed = false;
  }

  async open() {
    const result = await get(`/api/results/${this.id}`);
    if (this.closed) return;
    this.build(result);
    await this.take(result, true);
    if (this.closed) return;
    const first = this.wantDroplet ?? (result.droplets.find((d) => d.verdict !== "reject") || result.droplets[0])?.droplet;
    if (first !== undefined) this.choose(first);
    this.followPack();
    this.watchRevision();
  }

  build(result) {
    this.stageBox = el("div", { class: "stage", tabIndex: 0, role: "application", "aria-roledescription": "picture with tracks", "aria-label": "Picture of the recording with its tracks. Arrow keys step through time, plus and minus zoom, Alt with arrows moves the view." },
      this.says = el("div", { class: "says", hidden: true, role: "status" }));
    this.timeBox = el("div", { class: "timebar", tabIndex: 0, role: "slider", "aria-label": "Time" });
    const watch = el("section", { class: "watch", "aria-label": "Watch" }, this.stageBox, this.timeBox);
    this.count = el("span", { class: "count" });
    this.warned = el("button", { type: "button", class: "warned", onclick: () => { this.details.open("history"); document.getElementById("tab-history").focus(); } });
    this.filter = el("select", { id: "filter", onchange: () => { this.table.setFilter(this.filter.value); this.sayCount(); } });
    const wrap = el("div", { class: "table-wrap", tabIndex: -1 });
    this.facts = el("div", { class: "facts" });
    this.detailBox = el("div", { class: "detail" }, this.facts);
    this.decideBox = el("section", { class: "decide", "aria-label": "Decide" });
    const judge = el("section", { class: "judge", "aria-label": "Judge" },
      el("div", { class: "table-head" }, el("h2", {}, "Droplets"), this.count, this.warned, el("label", { htmlFor: "filter" }, "Show"), this.filter),
      wrap, this.detailBox, this.decideBox);
    this.main.replaceChildren(el("h1", { class: "hidden" }, `Recording ${result.name}`), el("div", { class: "inspect" }, watch, judge));
    this.table = new DropletTable(wrap, { onChoose: (d) => this.choose(d), reasons: this.reasons });
    this.stage = new Stage(this.stageBox, { onChoose: (d) => this.choose(d, false), onView: () => this.player.refreshZoom() });
    this.timebar = new TimeBar(this.timeBox, { onScrub: (frame) => this.player.go(frame) });
    this.frames = new Frames(`/api/results/${this.id}/frames/${result.recording_hash}`, (frame, bitmap, half) => this.stage.show(frame, bitmap, half));
    this.player = new Player(watch, { frames: this.frames, stage: this.stage, timebar: this.timebar, stageBox: this.stageBox, timeBox: this.timeBox });
    this.stage.onDrawn = (state) => { this.player.drawn(state); this.details.setTime(state.frame); };
    this.details = new Details(this.detailBox, this);
    this.judge = new Judge(this.decideBox, {
      state: () => ({ result: this.result, chosen: this.chosen, time: this.result.times[this.frames.wanted] }),
      onResult: (answer) => this.decided(answer),
      onStale: (error) => this.stale(error.message),
    });
    this.header(result);
  }

  header(result) {
    this.trail.replaceChildren(el("span", { "aria-hidden": "true" }, "/"), el("span", { class: "name", title: result.folder }, result.name));
    const others = this.shelf.items.filter((item) => item.status === "done"), at = others.findIndex((item) => item.id === this.id);
    const move = (step, text, key) => {
      const item = others[at + step];
      return el("button", { type: "button", disabled: at < 0 || !item, "aria-keyshortcuts": key, title: item ? `${item.name} (key ${key})` : "", onclick: () => { location.hash = `#/${item.id}`; } }, text);
    };
    this.previous = move(-1, "\u2039 Previous", "P");
    this.next = move(1, "Next \u203a", "N");
    this.export = el("button", { type: "button", "aria-haspopup": "dialog", onclick: () => exportMenu(this) }, "Export");
    this.tools.replaceChildren(this.previous, this.next, this.export);
  }

  // Take in a result as the server gives it now; the tracks are fetched anew because a split renumbers them.
  async take(result, first = false) {
    const buffer = await (await get(`/api/results/${this.id}/tracks?revision=${result.revision}`)).arrayBuffer();
    if (this.closed) return;
    this.result = result;
    this.tracks = readTracks(buffer);
    this.stage.tracks = this.tracks;
    this.stage.verdicts = new Map(result.droplets.map((d) => [d.droplet, d.verdict]));
    if (first) {
      this.stage.setPicture(result.width, result.height);
      this.player.setTimes(result.times, result.segments);
    }
    const told = result.warnings.length;
    this.warned.hidden = !told;
    this.warned.textContent = told === 1 ? "1 warning" : `${told} warnings`;
    this.warned.title = result.warnings.join("\n");
    this.fillFilter();
    this.table.set(result.droplets);
    this.sayCount();
    this.judge.refresh();
    this.details.setResult();
    this.stage.draw();
  }

  fillFilter() {
    const before = this.filter.value, codes = new Map();
    for (const d of this.result.droplets) for (const code of d.reasons) codes.set(code, (codes.get(code) || 0) + 1);
    const option = (value, text) => el("option", { value }, text);
    const count = (verdict) => this.result.droplets.filter((d) => d.verdict === verdict).length;
    this.filter.replaceChildren(option("", "all"), ...["keep", "doubt", "reject"].map((v) => option(v, `${v} (${count(v)})`)),
      ...[...codes].map(([code, n]) => option(code, `${code.replaceAll("_", " ")} (${n})`)));
    this.filter.value = [...this.filter.options].some((o) => o.value === before) ? before : "";
    this.table.filter = this.filter.value;
  }

  sayCount() {
    const all = this.result.droplets, kept = all.filter((d) => d.verdict === "keep").length;
    this.count.textContent = `${all.length} found, ${kept} kept${this.filter.value ? `, ${this.table.shown.length} shown` : ""}`;
  }

  // `look` brings the droplet into view; not after a click on it, as the picture must not move under the pointer.
  choose(droplet, look = true) {
    this.chosen = droplet;
    this.stage.chosen = droplet;
    this.table.choose(droplet);
    const track = this.tracks.get(droplet);
    if (track) {
      const times = this.result.times, span = [times[track.frame[0]], times[track.frame[track.frame.length - 1]]];
      this.timebar.span = span;
      this.timebar.draw();
      // A droplet that is not in the picture now is shown where it is seen nearest in time.
      const first = track.frame[0], last = track.frame[track.frame.length - 1];
      if (this.frames.wanted < first || this.frames.wanted > last) this.player.go(Math.min(last, Math.max(first, this.frames.wanted)));
      const at = Math.max(0, rowAt(track, this.frames.wanted));
      if (look) this.stage.lookAt(track.x[at], track.y[at]);
    }
    this.stage.draw();
    this.fillFacts();
    this.judge.refresh();
    this.details.setDroplet(droplet);
    history.replaceState(null, "", `#/${this.id}/${droplet}`);
  }

  get droplet() { return this.result.droplets.find((d) => d.droplet === this.chosen) || null; }

  fillFacts() {
    const d = this.droplet;
    if (!d) { this.facts.replaceChildren(el("p", { class: "soft" }, "Choose a droplet in the picture or in the table.")); return; }
    const value = (name, text, more = "") => (text ? el("span", {}, `${name} `, el("b", { class: "num" }, text), more) : null);
    // What of the charge's uncertainty is the droplet's own, and what all droplets of the bench share.
    const parts = ({ charge_own_std_c: own, charge_shared_std_c: shared }) => (own === null || shared === null ? "" : ` (own ${(own * 1e19).toPrecision(2)}, shared ${(shared * 1e19).toPrecision(2)})`);
    const probability = d.charge_number_probability;
    this.facts.replaceChildren(
      el("div", { class: "row" }, el("h2", {}, `Droplet ${d.droplet}`), verdictMark(d.verdict, d.by_hand),
        el("span", { class: "soft num" }, `${d.frames} of ${this.tracks.get(d.droplet)?.frame.length ?? 0} frames used, ${fixed(d.first_s, 1)} to ${fixed(d.last_s, 1)} s`)),
      el("div", { class: "values" },
        value("falls", d.fall_speed_m_s === null ? "" : `${withDoubt(d.fall_speed_m_s, d.fall_speed_std_m_s, 1e6)} \u00b5m/s`),
        value("radius", d.radius_m === null ? "" : `${withDoubt(d.radius_m, d.radius_std_m, 1e6)} \u00b5m`),
        value("number", d.charge_number === null ? "" : `${signed(d.charge_number)}, P ${probability > 0.9995 ? "> 0.999" : fixed(probability, 3)}`),
        value("charge", d.charge_c === null ? "" : `${withDoubt(d.charge_c, d.charge_std_c, 1e19)} \u00d7 10\u207b\u00b9\u2079 C`, parts(d)),
        value("balances at", d.balance_v === undefined ? "" : `${withDoubt(d.balance_v, d.balance_std_v)} V`),
        value("diffusion ratio", fixed(d.diffusion_ratio, 2))),
      d.reasons.length || d.decision ? el("ul", {}, ...d.reasons.map((code) => el("li", {}, this.reasons[code] || code)), d.decision ? el("li", {}, d.decision) : null) : "",
    );
  }

  async decided(answer) {
    const before = this.chosen;
    await this.take(answer.result);
    const still = this.result.droplets.some((d) => d.droplet === before);
    const next = answer.droplet ?? (still ? before : this.result.droplets[0]?.droplet);
    if (next !== undefined) this.choose(next);
    else { this.chosen = null; this.fillFacts(); }
    clearNotice("stale");
  }

  stale(text) {
    const again = el("button", { type: "button", onclick: () => this.reload() }, "Show what is there now");
    notice(text, { bad: true, key: "stale", action: again });
  }

  async reload() {
    clearNotice("stale");
    try {
      await this.take(await get(`/api/results/${this.id}`));
      const still = this.result.droplets.some((d) => d.droplet === this.chosen);
      if (!still) this.chosen = this.result.droplets[0]?.droplet ?? null;
      if (this.chosen !== null) this.choose(this.chosen);
    } catch (error) { complain(error); }
  }

  // Another window or the command line may have changed this result: the page asks and tells, but never redraws by itself.
  async watchRevision() {
    while (!this.closed) {
      await new Promise((resolve) => setTimeout(resolve, 2500));
      if (this.closed || document.hidden || this.judge.busy) continue;
      try {
        const { revision } = await get(`/api/results/${this.id}/revision`);
        if (!this.closed && !this.judge.busy && revision !== this.result.revision) this.stale("This result was changed elsewhere since this page read it.");
        clearNotice("server");
      } catch (error) { if (!this.closed) notice(error.message, { bad: true, key: "server" }); }
    }
  }

  // Pictures are prepared on first opening; those that are ready can be watched at once.
  async followPack() {
    let before = -1;
    while (!this.closed) {
      let pack;
      try { pack = await post(`/api/results/${this.id}/pack`); } catch (error) { pack = { state: "failed", message: error.message, frames: 0 }; }
      if (this.closed) return;
      this.frames.ready = pack.frames;
      this.timebar.ready = pack.frames;
      this.player.setPack(pack);
      this.says.hidden = pack.state === "ready";
      const share = Math.round((100 * pack.frames) / Math.max(1, this.result.times.length));
      this.says.textContent = pack.state === "failed" ? `No pictures: ${pack.message}` : `Preparing pictures, ${share} %. Those that are ready can be watched.`;
      if (before <= this.frames.wanted && pack.frames > this.frames.wanted) this.frames.again();
      else this.stage.draw();
      this.timebar.draw();
      before = pack.frames;
      if (pack.state !== "working") { this.details.setPack(); return; }
      await new Promise((resolve) => setTimeout(resolve, 400));
    }
  }

  key(event) {
    if (this.player?.key(event)) return true;
    const b = this.judge?.buttons, name = event.key.length === 1 ? event.key.toLowerCase() : event.key;
    const press = (button) => { if (button && !button.disabled) button.click(); return true; };
    switch (name) {
      case "a": return press(b?.keep);
      case "d": return press(b?.doubt);
      case "x": return press(b?.reject);
      case "s": return press(b?.split);
      case "[": return press(b?.trimStart);
      case "]": return press(b?.trimEnd);
      case "u": return press(b?.undo);
      case "n": return press(this.next);
      case "p": return press(this.previous);
      case "e": return press(this.export);
      case "ArrowDown": case "ArrowUp": {
        const next = this.table.neighbour(name === "ArrowDown" ? 1 : -1);
        if (next !== null) this.choose(next);
        return true;
      }
      default: return false;
    }
  }

  close() {
    this.closed = true;
    this.player?.close();
    this.frames?.close();
    this.stage?.close();
    this.timebar?.close();
    this.details?.close();
    this.tools.replaceChildren();
    this.trail.replaceChildren();
  }
}
