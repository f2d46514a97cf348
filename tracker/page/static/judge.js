// A person's decisions on the chosen droplet: accept, doubt, reject, split, trim, join, set back, undo.

import { el, notice, sentence, verdictShape } from "./dom.js";
import { Refused, post } from "./api.js";

const at = (time) => `${time.toFixed(3)} s`;

// What is under way, in words.
function doing(what, { droplet, verdict, at: time, start, end, other }) {
  if (what === "undo") return "Taking the last decision back";
  if (verdict === "split") return `Splitting droplet ${droplet} at ${at(time)}`;
  if (verdict === "trim") return `Trimming droplet ${droplet} ${start === undefined ? `after ${at(end)}` : `before ${at(start)}`}`;
  if (verdict === "join") return `Joining droplets ${droplet} and ${other}`;
  return verdict === "reset" ? `Setting droplet ${droplet} back` : `Marking droplet ${droplet} as ${verdict}`;
}

// What became of the tracks: the numbers that came or went.
function did(before, after, { droplet, verdict, other }) {
  const had = new Set(before.droplets.map((d) => d.droplet)), come = after.droplets.map((d) => d.droplet).filter((n) => !had.has(n));
  if (verdict === "split" && come.length) return `Droplet ${droplet} is now ${[droplet, ...come].join(" and ")}.`;
  if (verdict === "join") return `Droplets ${droplet} and ${other} are one.`;
  return "";
}

export class Judge {
  constructor(box, { state, onResult, onStale }) {
    Object.assign(this, { state, onResult, onStale });
    this.reason = el("input", { type: "text", id: "reason", maxLength: 400, autocomplete: "off", placeholder: "why, in your words" });
    this.outcome = el("div", { class: "outcome", role: "status", id: "outcome" });
    this.working = el("progress", { class: "working off", "aria-label": "Evaluation" });
    const act = (text, title, call, key) => {
      const button = el("button", { type: "button", title: key ? `${title} (key ${key})` : title, onclick: call }, text);
      if (key) button.setAttribute("aria-keyshortcuts", key);
      return button;
    };
    this.buttons = {
      keep: act("Accept", "Keep this droplet", () => this.verdict("keep"), "A"),
      doubt: act("Doubt", "Doubt this droplet", () => this.verdict("doubt"), "D"),
      reject: act("Reject", "Reject this droplet", () => this.verdict("reject"), "X"),
      split: act("Split", "Split the track at the frame shown", () => this.split(), "S"),
      trimStart: act("Trim before", "Leave out everything before the frame shown", () => this.trim("start"), "["),
      trimEnd: act("Trim after", "Leave out everything after the frame shown", () => this.trim("end"), "]"),
      reset: act("Set back", "Take all decisions on this droplet back", () => this.decide({ verdict: "reset" })),
      undo: act("Undo", "Take the last decision of this recording back", () => this.undo(), "U"),
    };
    this.other = el("select", { id: "other" });
    this.join = act("Join", "Join this track with the chosen other one", () => this.joinWith(), null);
    const { keep, doubt, reject, split, trimStart, trimEnd, reset, undo } = this.buttons;
    for (const verdict of ["keep", "doubt", "reject"]) this.buttons[verdict].prepend(verdictShape(verdict));
    box.append(
      el("div", { class: "reason" }, el("label", { htmlFor: "reason" }, "Reason"), this.reason, reset, undo),
      el("div", { class: "row" },
        el("div", { class: "row", role: "group", "aria-label": "Verdict of a person" }, keep, doubt, reject),
        el("div", { class: "row", role: "group", "aria-label": "Change the track" }, split, trimStart, trimEnd, this.join, el("label", { htmlFor: "other", class: "hidden" }, "Other droplet to join with"), this.other)),
      this.outcome, this.working,
    );
    this.reason.setAttribute("aria-describedby", "outcome");
    this.reason.addEventListener("input", () => this.hint());
    this.hint();
  }

  hint() { this.say("Write the reason, then decide. Split and trim act at the frame shown.", false); }

  say(text, wrong = true) {
    this.outcome.textContent = text;
    this.outcome.classList.toggle("error", wrong);
    this.reason.setAttribute("aria-invalid", wrong && text ? "true" : "false");
  }

  refresh() {
    const { result, chosen } = this.state();
    const none = chosen === null;
    for (const [name, button] of Object.entries(this.buttons)) button.disabled = this.busy || (name === "undo" ? !result.can_undo : none);
    this.join.disabled = this.busy || none;
    const before = this.other.value;
    this.other.replaceChildren(el("option", { value: "" }, "with"), ...result.droplets.filter((d) => d.droplet !== chosen).map((d) => el("option", { value: String(d.droplet) }, String(d.droplet))));
    if ([...this.other.options].some((option) => option.value === before)) this.other.value = before;
  }

  needReason() {
    if (this.reason.value.trim()) return true;
    this.say("Please write the reason first: it is kept with the decision.");
    this.reason.focus();
    return false;
  }

  verdict(verdict) { if (this.needReason()) this.decide({ verdict }); }

  split() { if (this.needReason()) this.decide({ verdict: "split", at: this.state().time }); }

  trim(end) {
    if (!this.needReason()) return;
    const { time } = this.state();
    this.decide(end === "start" ? { verdict: "trim", start: time } : { verdict: "trim", end: time });
  }

  joinWith() {
    if (!this.other.value) { this.say("Choose the other droplet first."); this.other.focus(); return; }
    if (this.needReason()) this.decide({ verdict: "join", other: Number(this.other.value) });
  }

  async decide(decision) {
    const { result, chosen } = this.state();
    if (chosen === null) return;
    await this.send("decide", { revision: result.revision, droplet: chosen, reason: this.reason.value.trim(), ...decision });
  }

  async undo() {
    const { result } = this.state();
    if (result.can_undo) await this.send("undo", { revision: result.revision });
  }

  async send(what, body) {
    if (this.busy) return;
    const held = document.activeElement;
    this.busy = true;
    this.say(`${doing(what, body)} and evaluating again \u2026`, false);
    this.working.classList.remove("off");
    this.refresh();
    try {
      const answer = await post(`/api/results/${this.state().result.id}/${what}`, body);
      // A reason that was begun in the meantime belongs to the next decision.
      if (this.reason.value.trim() === body.reason) this.reason.value = "";
      this.say(`${what === "undo" ? "Taken back" : `${did(this.state().result, answer.result, body)} Kept in decisions.jsonl`}; evaluated again in ${answer.seconds.toFixed(2)} s.`, false);
      this.busy = false;
      await this.onResult(answer, what);
    } catch (error) {
      this.busy = false;
      this.hint();
      if (error instanceof Refused && error.status === 409) this.onStale(error);
      else if (error instanceof Refused && error.status >= 400 && error.status < 500) this.say(sentence(error.message));
      else notice(error.message, { bad: true });
    }
    this.working.classList.add("off");
    this.refresh();
    // A button that was disabled meanwhile lost the focus: whoever works with the keyboard goes on from there.
    if (document.activeElement === document.body && held?.isConnected) (held.disabled ? this.reason : held).focus();
  }
}
