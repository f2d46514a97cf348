// The table of droplets: sortable, filtered by reason or verdict, one tab stop for all rows.

import { el, fixed, signed, verdictMark, withDoubt } from "./dom.js";

const RANK = { reject: 0, doubt: 1, keep: 2 };
const COLUMNS = [
  { key: "droplet", title: "No", unit: "", right: true, value: (d) => d.droplet, text: (d) => String(d.droplet) },
  { key: "verdict", title: "Verdict", unit: "", value: (d) => RANK[d.verdict], text: null },
  { key: "radius_m", title: "Radius", unit: "\u00b5m", right: true, value: (d) => d.radius_m, text: (d) => withDoubt(d.radius_m, d.radius_std_m, 1e6) },
  { key: "charge_c", title: "Charge", unit: "10\u207b\u00b9\u2079 C", right: true, value: (d) => d.charge_c, text: (d) => withDoubt(d.charge_c, d.charge_std_c, 1e19) },
  { key: "charge_number", title: "n", unit: "", right: true, value: (d) => d.charge_number, text: (d) => signed(d.charge_number), label: "charge number" },
  { key: "charge_number_probability", title: "P(n)", unit: "", right: true, value: (d) => d.charge_number_probability, label: "probability of the charge number",
    text: (d) => (d.charge_number_probability > 0.9995 ? ">0.999" : fixed(d.charge_number_probability, 3)) },
  { key: "frames", title: "Frames", unit: "", right: true, spare: true, value: (d) => d.frames, text: (d) => String(d.frames) },
  { key: "worst", title: "Reasons", unit: "", value: (d) => RANK[d.verdict] * 100 - d.reasons.length, text: null },
];

const why = (text) => el("td", { class: "why", title: text }, el("span", {}, text));

export class DropletTable {
  constructor(box, { onChoose, reasons }) {
    this.onChoose = onChoose;
    this.reasons = reasons;
    this.droplets = [];
    this.sort = { key: "droplet", down: false };
    this.filter = "";
    this.chosen = null;
    this.body = el("tbody");
    this.heads = COLUMNS.map((column) => {
      const button = el("button", { type: "button", onclick: () => this.sortBy(column.key) }, column.title,
        column.label ? el("span", { class: "hidden" }, `, ${column.label}`) : null,
        column.unit ? el("small", {}, ` / ${column.unit}`) : null, el("span", { "aria-hidden": "true" }, ""));
      return el("th", { scope: "col", title: column.label, class: `${column.right ? "r" : ""}${column.spare ? " spare" : ""}` }, button);
    });
    const head = el("thead", {}, el("tr", {}, ...this.heads));
    box.append(el("table", { class: "droplets", "aria-label": "Droplets of this recording", role: "grid" }, head, this.body));
    this.body.addEventListener("keydown", (event) => this.keys(event));
  }

  sortBy(key) {
    this.sort = { key, down: this.sort.key === key ? !this.sort.down : false };
    this.fill();
  }

  set(droplets) { this.droplets = droplets; this.fill(); }

  setFilter(filter) { this.filter = filter; this.fill(); }

  get shown() {
    const column = COLUMNS.find((c) => c.key === this.sort.key), way = this.sort.down ? -1 : 1;
    const passes = (d) => !this.filter || d.verdict === this.filter || d.reasons.includes(this.filter);
    const empty = (v) => v === null || v === undefined;
    return this.droplets.filter(passes).sort((a, b) => {
      const p = column.value(a), q = column.value(b);
      if (empty(p) || empty(q)) return empty(p) - empty(q) || a.droplet - b.droplet;   // empty cells last, either way
      return way * (p - q) || a.droplet - b.droplet;
    });
  }

  fill() {
    const focused = this.body.contains(document.activeElement);
    COLUMNS.forEach((column, i) => {
      const on = column.key === this.sort.key;
      this.heads[i].setAttribute("aria-sort", on ? (this.sort.down ? "descending" : "ascending") : "none");
      this.heads[i].querySelector("[aria-hidden]").textContent = on ? (this.sort.down ? " \u25be" : " \u25b4") : "";
    });
    this.body.replaceChildren(...this.shown.map((d) => this.row(d)));
    if (!this.shown.length) this.body.append(el("tr", {}, el("td", { colSpan: COLUMNS.length, class: "soft" }, this.droplets.length ? "No droplet passes the filter." : "No droplets in this recording.")));
    this.mark();
    if (focused) this.body.querySelector('tr[tabindex="0"]')?.focus({ preventScroll: true });
  }

  row(d) {
    const cells = COLUMNS.map((column) => {
      if (column.key === "verdict") return el("td", {}, verdictMark(d.verdict, d.by_hand));
      if (column.key === "worst") return why(d.reasons.map((code) => this.reasons[code] || code).join(" "));
      return el("td", { class: `num${column.right ? " r" : ""}${column.spare ? " spare" : ""}` }, column.text(d));
    });
    const row = el("tr", { tabIndex: -1, onclick: () => this.onChoose(d.droplet) }, ...cells);
    row.dataset.droplet = d.droplet;
    return row;
  }

  mark() {
    let found = null;
    for (const row of this.body.rows) {
      const on = row.dataset.droplet === String(this.chosen);
      if (row.dataset.droplet !== undefined) row.setAttribute("aria-selected", String(on));
      row.tabIndex = on ? 0 : -1;
      if (on) found = row;
    }
    if (!found && this.body.rows[0] && this.body.rows[0].dataset.droplet !== undefined) this.body.rows[0].tabIndex = 0;
    return found;
  }

  choose(droplet) {
    this.chosen = droplet;
    const row = this.mark();
    if (!row) return;
    const wrap = row.closest(".table-wrap"), head = this.heads[0].offsetHeight;
    if (row.offsetTop - head < wrap.scrollTop) wrap.scrollTop = row.offsetTop - head;
    else if (row.offsetTop + row.offsetHeight > wrap.scrollTop + wrap.clientHeight) wrap.scrollTop = row.offsetTop + row.offsetHeight - wrap.clientHeight;
  }

  // The droplet `step` rows below the chosen one, in the order shown.
  neighbour(step) {
    const order = this.shown.map((d) => d.droplet), at = order.indexOf(this.chosen);
    if (!order.length) return null;
    return order[at < 0 ? 0 : Math.min(order.length - 1, Math.max(0, at + step))];
  }

  keys(event) {
    const steps = { ArrowDown: 1, ArrowUp: -1, PageDown: 8, PageUp: -8, Home: -1e6, End: 1e6 };
    const step = steps[event.key];
    if (event.key === "Enter" || event.key === " ") {
      const row = event.target.closest("tr");
      if (row?.dataset.droplet !== undefined) this.onChoose(Number(row.dataset.droplet));
    } else if (step !== undefined) {
      const next = this.neighbour(step);
      if (next !== null) this.onChoose(next);
      this.body.querySelector('tr[tabindex="0"]')?.focus({ preventScroll: true });
    } else return;
    event.preventDefault();
    event.stopPropagation();
  }
}
