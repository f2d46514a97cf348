// The start view: a place to drop a recording, all recordings with their state, the worst tracks, work under way.

import { clearNotice, complain, el, fixed, notice, sentence, verdictMark } from "./dom.js";
import { get, post } from "./api.js";
import { Intake } from "./intake.js";

const ORDERS = [["name", "by name"], ["worst", "worst first"], ["new", "newest first"]];

const STEPS = ["Drop a recording, best with the bench file that says what is known of cell, oil, air and camera.", "Watch its droplets and judge the doubtful ones; each decision is kept with its reason.", "Export tables, pictures and a short report."];

const measuring = (item) => `${item.why}${item.progress > 0 ? `, ${Math.round(100 * item.progress)} %` : ""}`;

const counted = (parts) => parts.filter(([, n]) => n).map(([word, n]) => `${n} ${word}`).join(", ");

export class ShelfView {
  constructor(main, shelf, { tools, trail, update }) {
    Object.assign(this, { main, shelf, tools, trail, update });
    this.order = "name";
    this.reason = "";
    this.known = new Set(shelf.jobs.filter((job) => job.state !== "running" && job.state !== "waiting").map((job) => job.number));
  }

  async open() {
    this.trail.replaceChildren(el("span", { "aria-hidden": "true" }, "/"), el("span", { class: "name", title: this.shelf.place }, this.shelf.place));
    const left = el("div"), right = el("section", { class: "card", "aria-labelledby": "shelf-title" });
    this.jobBox = el("section", { class: "card", "aria-labelledby": "jobs-title", hidden: true });
    const cautions = el("section", { class: "card cautions", "aria-labelledby": "cautions-title" }, el("h2", { id: "cautions-title" }, "Before you switch on"),
      el("ul", {}, ...this.shelf.cautions.map((text) => el("li", {}, text))));
    this.intake = new Intake(left, this.shelf, { onStarted: () => { this.main.scrollTop = 0; this.poll(true); } });
    left.append(cautions);
    this.list = el("ul", { class: "shelf" });
    this.worst = el("div", { class: "worst-box" });
    this.tally = el("p", { class: "soft" });
    this.firstSteps = el("ol", { class: "steps" }, ...STEPS.map((text) => el("li", {}, text)));
    const order = el("select", { id: "order", onchange: () => { this.order = order.value; this.fill(); } }, ...ORDERS.map(([value, text]) => el("option", { value }, text)));
    this.reasonSelect = el("select", { id: "reason-filter", onchange: () => { this.reason = this.reasonSelect.value; this.fill(); } });
    right.append(el("h1", { id: "shelf-title" }, "Recordings"), this.tally,
      this.sorting = el("div", { class: "row shelf-tools" }, el("label", { htmlFor: "order" }, "Order"), order, el("label", { htmlFor: "reason-filter" }, "With reason"), this.reasonSelect),
      this.worst, this.list, this.firstSteps);
    this.main.replaceChildren(el("div", { class: "start" }, left, el("div", {}, this.jobBox, right)));
    this.fill();
    this.poll(true);
  }

  fill() {
    const codes = new Map();
    for (const item of this.shelf.items) for (const [code, n] of Object.entries(item.reasons || {})) codes.set(code, (codes.get(code) || 0) + n);
    this.reasonSelect.replaceChildren(el("option", { value: "" }, "any"), ...[...codes].sort().map(([code, n]) => el("option", { value: code }, `${code.replaceAll("_", " ")} (${n})`)));
    this.reasonSelect.value = codes.has(this.reason) ? this.reason : "";
    this.reason = this.reasonSelect.value;
    const by = { name: (a, b) => a.name.localeCompare(b.name, undefined, { numeric: true }), worst: (a, b) => b.bad - a.bad || a.name.localeCompare(b.name), new: (a, b) => b.when - a.when };
    const items = this.shelf.items.filter((item) => !this.reason || (item.reasons || {})[this.reason]).sort(by[this.order]);
    const n = (...states) => this.shelf.items.filter((item) => states.includes(item.status)).length;
    this.tally.textContent = this.shelf.items.length ? `${counted([["measured", n("done", "unread")], ["failed", n("failed")], ["being measured", n("measuring")], ["not measured", n("open")]])}, in ${this.shelf.place}` : "Nothing is measured here yet.";
    this.sorting.hidden = !this.shelf.items.length;
    this.firstSteps.hidden = !this.sorting.hidden;
    // Progress changes in place: a list that is drawn anew loses the keyboard's focus.
    const key = JSON.stringify(items, (name, value) => (name === "progress" ? undefined : value));
    if (key !== this.shownKey) {
      this.shownKey = key;
      this.bars = new Map();
      this.list.replaceChildren(...items.map((item) => this.tile(item)));
    }
    for (const item of items) this.showProgress(item);
    this.fillWorst();
    this.fillJobs();
  }

  tile(item) {
    const words = [el("div", { class: "name" }, item.name)];
    if (item.status === "done") {
      const parts = ["keep", "doubt", "reject"].map((v) => [v, item[v]]), total = Math.max(1, item.droplets);
      const bar = el("div", { class: "bar", "aria-hidden": "true" }, ...parts.map(([v, n]) => { const part = el("i", { class: v }); part.style.width = `${(100 * n) / total}%`; return part; }));
      words.push(el("div", { class: "soft" }, item.droplets ? `${item.droplets} ${item.droplets === 1 ? "droplet" : "droplets"}: ${counted(parts)}` : "no droplets"), bar, item.unit ? el("div", { class: "soft num" }, item.unit) : "");
      const picture = el("img", { src: `/api/results/${item.id}/small.jpg`, alt: "", loading: "lazy", width: 112, height: 84 });
      picture.addEventListener("error", () => picture.replaceWith(el("span", { class: "blank" }, "no picture")));
      const way = this.order === "worst" && item.worst !== null ? `#/${item.id}/${item.worst}` : `#/${item.id}`;
      return el("li", {}, el("a", { class: "tile", href: way }, picture, el("div", { class: "words" }, ...words)));
    }
    if (item.status === "measuring") {
      const bar = { text: el("div", { class: "soft num" }), progress: el("progress", { max: 1, "aria-label": `progress of ${item.name}` }) };
      this.bars.set(item.id, bar);
      words.push(bar.text, bar.progress);
    } else words.push(el("div", { class: "soft" }, sentence(item.status === "failed" ? `Failed: ${item.why}` : item.why || "not measured")));
    if (item.status === "open") words.push(this.measureButton(item.id, item.name, "Measure"));
    return el("li", {}, el("div", { class: "tile-off card" }, ...words));
  }

  showProgress(item) {
    const bar = this.bars.get(item.id);
    if (!bar) return;
    bar.text.textContent = sentence(measuring(item));
    if (item.progress > 0) bar.progress.value = item.progress;
  }

  // A recording that lies on the shelf without a result, with its bench file beside or above it.
  measureButton(id, name, text) {
    const start = async () => {
      try {
        const job = await post(`/api/recordings/${id}/measure`);
        this.intake.follow(job);
        this.main.scrollTop = 0;
        this.poll(true);
      } catch (error) { complain(error); }
    };
    return el("div", { class: "row" }, el("button", { type: "button", onclick: start, "aria-label": `${text} ${name}` }, text));
  }

  // The tracks with the most to look at, over all recordings: each opens where it lies.
  fillWorst() {
    const rows = this.shelf.items.flatMap((item) => (item.tracks || []).map((t) => ({ ...t, id: item.id, name: item.name })))
      .filter((t) => !this.reason || t.reasons.includes(this.reason)).sort((a, b) => b.score - a.score).slice(0, 12);
    if (!rows.length || (this.order !== "worst" && !this.reason)) { this.worst.replaceChildren(); return; }
    const head = el("tr", {}, ...["Recording", "Droplet", "Verdict", "Reasons"].map((text) => el("th", { scope: "col" }, text)));
    this.worst.replaceChildren(el("h2", { id: "worst-title" }, "Tracks to look at first"), el("table", { class: "worst", "aria-labelledby": "worst-title" }, el("thead", {}, head), el("tbody", {}, ...rows.map((t) => el("tr", {},
      el("td", {}, t.name), el("td", {}, el("a", { href: `#/${t.id}/${t.droplet}`, "aria-label": `droplet ${t.droplet} of ${t.name}` }, String(t.droplet))), el("td", {}, verdictMark(t.verdict)),
      el("td", {}, t.reasons.map((code) => this.shelf.reasons[code] || code).join(" ")))))));
  }

  fillJobs() {
    const jobs = this.shelf.jobs.filter((job) => job.kind === "measure");
    this.jobBox.hidden = !jobs.length;
    if (!jobs.length) return;
    const focus = document.activeElement?.dataset?.job;
    this.jobBox.replaceChildren(el("h2", { id: "jobs-title" }, "Measurements"), el("ul", { class: "jobs" }, ...jobs.slice(0, 8).map((job) => this.job(job))));
    if (focus) this.jobBox.querySelector(`[data-job="${focus}"]`)?.focus();
  }

  job(job) {
    const state = { waiting: "waits", running: job.text || "measuring", cancelling: "stopping", done: "done", failed: "failed", cancelled: "cancelled" }[job.state];
    const parts = [el("div", { class: "spread" }, el("strong", {}, job.title), el("span", { class: "num soft" }, job.seconds && job.state !== "cancelled" ? `${state}, ${fixed(job.seconds, 0)} s` : state))];
    if (job.state === "running" || job.state === "waiting") {
      const bar = el("progress", { max: 1, "aria-label": `progress of ${job.title}` });
      if (job.progress > 0) bar.value = job.progress;
      const cancel = el("button", { type: "button", onclick: () => post(`/api/jobs/${job.number}/cancel`).then(() => this.poll(true), complain), "aria-label": `Cancel ${job.title}` }, "Cancel");
      cancel.dataset.job = job.number;
      parts.push(el("div", { class: "row" }, el("span", { class: "num" }, `${Math.round(100 * job.progress)} %`), cancel), bar);
    }
    if (job.state === "failed") parts.push(el("div", { class: "error" }, sentence(job.error.message)));
    if (job.again) parts.push(this.measureButton(job.again, job.title, "Measure again"));
    if (job.state === "done" && job.result.id) parts.push(el("a", { href: `#/${job.result.id}` }, "Open"));
    return el("li", {}, ...parts);
  }

  async poll(now = false) {
    clearTimeout(this.timer);
    if (this.closed) return;
    if (now) {
      try {
        this.shelf = await get("/api/shelf");
        this.update(this.shelf);
        clearNotice("server");
      } catch (error) { if (!this.closed) notice(error.message, { bad: true, key: "server" }); }
      if (this.closed) return;
      this.fill();
      for (const job of this.shelf.jobs) {
        if (job.kind !== "measure" || this.known.has(job.number)) continue;
        if (job.state === "done" && this.intake.current === job.number) { location.hash = `#/${job.result.id}`; return; }
        if (job.state === "failed" || job.state === "done" || job.state === "cancelled") {
          this.known.add(job.number);
          this.intake.ended(job);
        }
      }
    }
    const busy = this.shelf.jobs.some((job) => job.state === "running" || job.state === "waiting" || job.state === "cancelling") || this.shelf.items.some((item) => item.status === "unread");
    this.timer = setTimeout(() => this.poll(true), busy ? 500 : 4000);
  }

  key() { return false; }

  close() {
    this.closed = true;
    clearTimeout(this.timer);
    this.intake?.close();
    this.trail.replaceChildren();
    this.tools.replaceChildren();
  }
}
