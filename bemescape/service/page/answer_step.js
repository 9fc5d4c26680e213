// Step 3: progress of a run, and its answer.
import * as api from "./api.js";
import { h, say } from "./dom.js";
import { lengthText, percentText, timeText } from "./scales.js";
import { Step } from "./step.js";

const PICTURES = { "report.html": "report", "summary.json": "summary (JSON)", "surface.vtp": "surface with values (VTP)", "result.npz": "everything (NPZ)" };
const STATES = { queued: "waiting", running: "computing", done: "done", failed: "failed", cancelled: "cancelled", deleted: "deleted" };

export class AnswerStep {
  constructor(app) {
    this.app = app;
    this.step = new Step("answer", 3, "Answer");
  }

  lock() {
    this.step.state("after the openings", { locked: true });
    this.step.show();
  }

  state(run) { return STATES[run.state] ?? run.state; }

  /** A run that has no answer yet, or never will. */
  progress(run, event = run.progress) {
    this.step.state(this.state(run));
    this.step.open();
    const over = ["failed", "cancelled", "deleted"].includes(run.state);
    const text = run.state === "queued" ? (run.before_it ? `${run.before_it} of your runs come first.` : "It is next.")
      : run.state === "running" ? [event?.stage ?? "starting", event?.detail].filter(Boolean).join(": ") : run.reason ?? "";
    const bar = h("progress", { "aria-label": "progress of this stage", max: 1 });
    if (event?.done !== null && event?.done !== undefined) bar.value = event.done;
    this.step.show(h("p", {}, h("strong", {}, run.name), `: ${this.state(run)}`), over ? null : bar,
      h("p", { class: run.state === "failed" ? "bad" : "soft", id: "progress-text", role: "status" }, text),
      over ? null : h("button", { type: "button", id: "cancel", onclick: async (e) => {
        e.target.disabled = true;
        try { await api.cancelRun(run.id); say("It stops at its next step."); } catch (error) { say(error.message, { bad: true }); }
      } }, "Cancel this run"));
  }

  show(run, summary) {
    this.run = run;
    this.step.state(timeText(summary.mean_time_s), { done: true });
    this.step.open();
    const starts = Object.entries(summary.start);
    const kappa = (w) => (w.permeability_um_s === null ? "" : ` (κ ${w.permeability_um_s} µm/s)`);
    this.regions = h("div", { id: "regions" });
    this.files = h("div", { class: "downloads", id: "downloads" });
    this.opinion = h("p", { class: "small", id: "opinion" });
    this.step.show(
      h("p", { class: "small soft" }, run.name),
      h("p", { class: "big", id: "mean-time" }, timeText(summary.mean_time_s), h("small", {}, ` ± ${percentText(summary.relative_error)}`)),
      h("p", { class: "small soft" }, "mean escape time, from all places inside alike",
        summary.escape_time_sd_s === null ? "" : `; standard deviation ${timeText(summary.escape_time_sd_s)}`),
      summary.target_met ? null : h("div", { class: "finding warning" }, "The wanted error was not reached within the panel budget."),
      h("table", { id: "shares" }, h("thead", {}, h("tr", {}, h("th", { scope: "col" }, "window"), h("th", { scope: "col" }, "area"), h("th", { scope: "col" }, "share of exits"))),
        h("tbody", {}, summary.windows.slice(0, 60).map((w) => h("tr", {}, h("td", {}, w.name + kappa(w)), h("td", {}, `${Number(w.area_um2.toPrecision(3))} µm²`), h("td", {}, percentText(w.share, 3)))))),
      starts.length ? this.starts(summary, starts) : null,
      h("h3", {}, "Slow regions"), this.regions,
      h("h3", {}, "Checks"),
      h("p", { class: "small" }, `Outflow through all windows against volume/D: ${percentText(summary.checks.balance)} off. Rule of thumb, which knows no necks: ${timeText(summary.rule_of_thumb.mean_time_s)}.`),
      this.opinion,
      summary.notes.length ? h("details", {}, h("summary", {}, `Notes (${summary.notes.length})`), h("ul", { class: "small" }, summary.notes.map((note) => h("li", {}, note)))) : null,
      h("h3", {}, "Downloads"), this.files,
      h("p", { class: "small soft" }, `${summary.panels} panels, ${Number(summary.wall_s.toPrecision(3))} s`));
    this.update(run);
  }

  starts(summary, starts) {
    const names = summary.windows.map((w) => w.name).filter((name) => starts.some(([start]) => summary.start_details[start]?.splitting?.[name] !== undefined));
    return h("table", { id: "starts" }, h("thead", {}, h("tr", {}, h("th", { scope: "col" }, "start"), h("th", { scope: "col" }, "mean time"), names.map((name) => h("th", { scope: "col" }, `by ${name}`)))),
      h("tbody", {}, starts.map(([start, time]) => h("tr", {}, h("td", {}, start), h("td", {}, timeText(time)),
        names.map((name) => h("td", {}, percentText(summary.start_details[start].splitting[name], 3)))))));
  }

  /** What follows the numbers: pictures, report, second opinion. */
  update(run) {
    const link = (name, text) => h("a", { href: api.fileUrl(run.id, name), download: name }, text);
    this.files.replaceChildren(
      ...Object.entries(PICTURES).filter(([name]) => run.files.includes(name)).map(([name, text]) => link(name, text)),
      h("a", { href: `api/runs/${run.id}/tables.csv`, download: "tables.csv" }, "tables (CSV)"),
      h("button", { type: "button", class: "plain", id: "picture", onclick: () => this.picture(run) }, "this view (PNG)"),
      ...(run.files.some((name) => name.endsWith(".png")) ? [h("span", { class: "soft" }, "pictures:"),
        ...run.files.filter((name) => name.endsWith(".png")).map((name) => link(name, name.replace(".png", "").replace("_", " ")))] : []),
      ...(["waiting", "running"].includes(run.pictures) ? [h("span", { class: "soft busy" }, "report and pictures are being drawn")] : []),
      ...(run.pictures === "failed" ? [h("span", { class: "bad" }, "the pictures could not be drawn; the numbers are complete")] : []));
    const agrees = run.answer?.agrees;
    this.opinion.textContent = run.opinion === "done" ? `${agrees ? "Checked: " : "Checked, and differs: "}${run.opinion_text}`
      : { waiting: "A second opinion by another method follows when nothing else waits.", running: "A second opinion is being computed.", failed: `No second opinion: ${run.opinion_text}` }[run.opinion] ?? "";
    this.opinion.className = `small ${run.opinion === "done" ? (agrees ? "good" : "bad") : "soft"}`;
  }

  async picture(run) {
    const blob = await this.app.stage.picture();
    const link = h("a", { href: URL.createObjectURL(blob), download: `${run.name}.png` });
    link.click();
    setTimeout(() => URL.revokeObjectURL(link.href), 1000);
  }

  showRegions({ wall_fraction: part, regions }) {
    this.regions.replaceChildren(h("p", { class: "small soft" }, `The slowest ${percentText(part)} of the wall, in ${regions.length} piece${regions.length === 1 ? "" : "s"}:`),
      h("ul", { class: "plain small" }, regions.slice(0, 8).map((region, k) => h("li", {},
        h("button", { type: "button", class: "plain", "data-region": String(k), onclick: () => this.app.stage.fly(this.app.pane, region.centre_um) }, timeText(region.mean_time_s)),
        ` over ${Number(region.area_um2.toPrecision(2))} µm², ${lengthText(region.distance_to_window_um)} along the wall to ${region.nearest_window}`))));
  }

  comparison({ rows }) {
    this.step.state(`${rows.length} runs side by side`, { done: true });
    this.step.open();
    this.step.show(h("table", { id: "compared" },
      h("thead", {}, h("tr", {}, h("th", { scope: "col" }, "run"), h("th", { scope: "col" }, "mean time"), h("th", { scope: "col" }, "of the first"))),
      h("tbody", {}, rows.map((row, k) => h("tr", {}, h("td", {}, row.name), h("td", {}, `${timeText(row.mean_time_s)} ± ${percentText(row.relative_error)}`),
        h("td", {}, k === 0 ? "" : `${Number(row.ratio.toPrecision(4))} ± ${Number(row.ratio_error.toPrecision(1))}${row.differs ? "" : ", no difference"}`))))),
    h("p", { class: "small soft" }, "One colour scale for all; the views turn together. The ± is the numerical error, not that of the segmentation."),
    h("button", { type: "button", onclick: () => this.app.openRun(rows[0].run) }, "Back to one run"));
  }
}
