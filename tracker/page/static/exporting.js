// Export: this frame as PNG, a video, the tables, the short report. Everything is made by the server's own drawing.

import { clearNotice, complain, el, notice, sentence, showDialog } from "./dom.js";
import { get, post } from "./api.js";

export function exportMenu(view) {
  const base = `/api/results/${view.id}/export`, frame = view.frames.wanted, last = view.result.times.length - 1;
  const link = (href, text, about) => el("p", {}, el("a", { href, download: "" }, text), el("span", { class: "soft" }, ` \u2013 ${about}`));
  const number = (id, text, value) => el("label", { htmlFor: id }, `${text} `, el("input", { type: "text", inputMode: "numeric", id, value: String(value), size: 6 }));
  const error = el("p", { class: "error", role: "alert" });
  const from = number("video-from", "from frame", 0), to = number("video-to", "to frame", last);
  const make = el("button", { type: "button", class: "main" }, "Make video");
  const dialog = showDialog("Export", [
    link(`${base}/frame/${frame}.png`, `This frame (${frame}) with its tracks`, "PNG, full size"),
    link(`${base}/tables.zip`, "Tables", "all CSV files, recording.json and decisions.jsonl"),
    link(`${base}/report.html`, "Short report", "one HTML file that needs nothing from elsewhere"),
    el("fieldset", {}, el("legend", {}, "Video with its tracks"), el("div", { class: "row" }, from, to, make), error),
  ]);
  make.addEventListener("click", async () => {
    const first = Number(from.querySelector("input").value), end = Number(to.querySelector("input").value);
    try {
      const job = await post(`${base}/video`, { first, last: end });
      dialog.close();
      await follow(job.number, view);
    } catch (problem) { error.textContent = sentence(problem.message); }
  });
}

async function follow(number, view) {
  const cancel = el("button", { type: "button", onclick: () => post(`/api/jobs/${number}/cancel`).catch(complain) }, "Cancel");
  const shown = notice("Making the video, 0 %", { key: "video", action: cancel });
  for (;;) {
    await new Promise((resolve) => setTimeout(resolve, 500));
    let job;
    try { job = await get(`/api/jobs/${number}`); } catch (error) { clearNotice("video"); complain(error); return; }
    if (job.state === "done") {
      const save = el("a", { href: `/api/jobs/${number}/file`, download: "" }, "Save the video");
      notice(`The video of ${view.result.name} is ready.`, { key: "video", action: save });
      return;
    }
    if (job.state === "failed" || job.state === "cancelled") {
      notice(job.state === "failed" ? `No video: ${job.error.message}` : "The video was cancelled.", { key: "video", bad: job.state === "failed" });
      return;
    }
    shown.querySelector("span").textContent = `Making the video, ${Math.round(100 * job.progress)} %`;
  }
}
