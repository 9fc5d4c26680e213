// A study: several surfaces under one rule, their table and what it says.
import * as api from "./api.js";
import { byId, h, labelled, say, svg } from "./dom.js";
import { percentText, tickText, ticks, timeText, timeUnit } from "./scales.js";

const LOOK_EVERY_MS = 2000;
const OVER = ["done", "failed", "cancelled"];
const digits = (value, count = 3) => (value === null || value === undefined ? "" : String(Number(value.toPrecision(count))));
/** What the page shows of the table; the download has all of it. */
const COLUMNS = [
  ["mean time", (row) => (row.mean_time_s === null ? "" : `${timeText(row.mean_time_s)} ± ${percentText(row.relative_error)}`), "mean_time_s"],
  ["slowest", (row) => (row.slowest_time_s === null ? "" : timeText(row.slowest_time_s, 3)), "slowest_time_s"],
  ["volume (µm³)", (row) => digits(row.volume_um3), "volume_um3"],
  ["area (µm²)", (row) => digits(row.area_um2), "area_um2"],
  ["sphericity", (row) => digits(row.sphericity), "sphericity"],
  ["longest path (µm)", (row) => digits(row.longest_geodesic_um), "longest_geodesic_um"],
  ["neck radius (µm)", (row) => digits(row.narrowest_neck_radius_um), "narrowest_neck_radius_um"],
  ["windows (µm²)", (row) => digits(row.window_area_um2), "window_area_um2"],
];

export class StudyView {
  constructor(app) {
    this.app = app;
    this.record = null;
    this.labels = new Map();
  }

  get place() { return byId("study"); }

  hide() {
    clearTimeout(this.timer);
    this.record = null;
    this.place.hidden = true;
    this.place.replaceChildren();
  }

  // -- asking for one --------------------------------------------------------------------------------------------------

  /** The fields below the openings of a surface: which other shapes get the same rule. `order()` gives that rule. */
  form(surface, order) {
    const shapes = this.app.surfaces.filter((entry) => entry.solvable);
    if (shapes.length < 2) return null;
    const chosen = new Set([surface.id]);
    const name = h("input", { type: "text", id: "study-name", value: "study", maxlength: "60" });
    const send = h("button", { type: "button", id: "run-study", onclick: async () => {
      try {
        send.disabled = true;
        const { motion, window, accuracy, start } = order();
        const surfaces = shapes.filter(({ id }) => chosen.has(id)).map(({ id }) => ({ surface: id, ...this.labelsOf(id) }));
        const study = await api.startStudy({ name: name.value, surfaces, rule: { motion, window, accuracy, ...(start ? { start } : {}) } });
        await this.app.refresh();
        await this.app.openStudy(study.id);
      } catch (error) { say(error.message, { bad: true }); } finally { send.disabled = false; }
    } });
    const count = () => { send.textContent = `Compute ${chosen.size} shape${chosen.size === 1 ? "" : "s"}`; send.disabled = chosen.size === 0; };
    count();
    const label = (id, key, title) => h("input", { type: "text", maxlength: "60", placeholder: key, "aria-label": title, "data-label": key, value: this.labelsOf(id)[key],
      oninput: (event) => { this.labels.set(id, { ...this.labelsOf(id), [key]: event.target.value }); } });
    return h("details", { id: "study-form" }, h("summary", {}, "The same rule for several shapes"),
      h("p", { class: "small soft" }, "Windows by label, near another surface, or random pores suit any shape. Those given by a place lie at the same coordinates on each."),
      h("ul", { class: "plain members small" }, shapes.slice(0, 200).map((entry) => h("li", { "data-member": entry.id },
        h("input", { type: "checkbox", id: `member-${entry.id}`, checked: chosen.has(entry.id), onchange: (event) => { if (event.target.checked) chosen.add(entry.id); else chosen.delete(entry.id); count(); } }),
        h("label", { for: `member-${entry.id}`, title: entry.name }, entry.name),
        label(entry.id, "group", `group of ${entry.name}`), label(entry.id, "subject", `subject of ${entry.name}: animal, cell or donor`)))),
      labelled("Name of the study", name), send);
  }

  labelsOf(id) { return this.labels.get(id) ?? { group: "", subject: "" }; }

  shelfRow(entry) {
    const all = Object.values(entry.runs).reduce((sum, count) => sum + count, 0);
    const over = OVER.reduce((sum, state) => sum + (entry.runs[state] ?? 0), 0);
    return h("li", { class: entry.id === this.app.view.study ? "current" : "", "data-study": entry.id }, h("span", {}),
      h("button", { type: "button", class: "plain name", title: entry.name, onclick: () => this.app.openStudy(entry.id).catch((error) => say(error.message, { bad: true })) }, entry.name),
      h("span", {}, over < all ? `${over} of ${all}` : `${all} shape${all === 1 ? "" : "s"}`),
      h("button", { type: "button", class: "plain", "aria-label": `delete study ${entry.name}`, onclick: () => this.remove(entry) }, "delete"));
  }

  async remove(entry) {
    if (!window.confirm(`Delete the study ${entry.name} with its runs?`)) return;
    try {
      await api.deleteStudy(entry.id);
      await this.app.refresh();
      if (this.app.view.study === entry.id) await this.app.close();
    } catch (error) { say(error.message, { bad: true }); }
  }

  // -- showing one -----------------------------------------------------------------------------------------------------

  async show(record) {
    this.record = record;
    this.place.hidden = false;
    this.draw();
    this.place.focus({ preventScroll: true });
    await this.look();
  }

  /** While runs are computed, again and again; then once for the statistics. */
  async look() {
    clearTimeout(this.timer);
    const { id } = this.record;
    try {
      const record = await api.study(id);
      if (this.record?.id !== id) return;
      const changed = JSON.stringify(record.runs) !== JSON.stringify(this.record.runs);
      this.record = record;
      const over = record.rows.every((row) => OVER.includes(row.state));
      if (over) record.statistics = await api.studyStatistics(id);
      if (this.record?.id !== id) return;
      if (changed || over) this.draw();
      if (changed) await this.app.refresh();
      if (!over) this.timer = setTimeout(() => this.look(), LOOK_EVERY_MS);
    } catch (error) { say(error.message, { bad: true }); }
  }

  draw() {
    const { id, name, rows, statistics } = this.record;
    const over = rows.filter((row) => OVER.includes(row.state)).length;
    const [groups, subjects] = ["group", "subject"].map((key) => rows.some((row) => row[key]));
    const shares = [...new Set(rows.flatMap((row) => Object.keys(row.shares ?? {})))].slice(0, 8);
    const head = (text, title) => h("th", { scope: "col", title }, text);
    this.place.replaceChildren(h("h2", { id: "study-title" }, `Study: ${name}`),
      h("p", { class: "soft", role: "status", id: "study-state" }, over < rows.length ? `${over} of ${rows.length} shapes are through; the table fills as they come.` : `${rows.length} shapes, one rule.`),
      over < rows.length ? h("progress", { max: rows.length, value: over, "aria-label": "shapes that are over" }) : "",
      this.plot(rows.filter((row) => row.mean_time_s !== null)),
      h("div", { class: "wide" }, h("table", { id: "study-table" },
        h("thead", {}, h("tr", {}, head("shape"), head("state"), groups ? head("group") : null, subjects ? head("subject") : null,
          COLUMNS.map(([title, , key]) => head(title, this.record.columns[key])), shares.map((share) => head(`share of ${share}`)))),
        h("tbody", {}, rows.map((row) => h("tr", { "data-run": row.run },
          h("td", {}, row.state === "done" ? h("button", { type: "button", class: "plain", onclick: () => this.app.openRun(row.run).catch((error) => say(error.message, { bad: true })) }, row.name) : row.name),
          h("td", { class: row.state === "failed" ? "bad" : "soft", title: row.reason ?? "" }, this.app.answer.state(row)),
          groups ? h("td", {}, row.group) : null, subjects ? h("td", {}, row.subject) : null,
          COLUMNS.map(([, text]) => h("td", {}, text(row))), shares.map((share) => h("td", {}, row.shares?.[share] === undefined ? "" : percentText(row.shares[share], 3)))))))),
      this.failures(rows), statistics ? this.statements(statistics) : "",
      h("div", { class: "buttons downloads" }, h("a", { href: `api/studies/${id}/table.csv`, download: "table.csv" }, "whole table (CSV)"),
        h("a", { href: `api/studies/${id}/statistics`, download: "statistics.json" }, "statistics (JSON)"),
        h("button", { type: "button", class: "plain", onclick: () => this.app.close() }, "close the study")),
      h("p", { class: "small soft" }, "The ± is the numerical error of each answer, not that of the segmentation."));
  }

  failures(rows) {
    const failed = rows.filter((row) => row.state === "failed");
    return failed.length ? h("div", { class: "finding error" }, failed.slice(0, 10).map((row) => h("p", {}, h("strong", {}, row.name), `: ${row.reason}`)), failed.length > 10 ? h("p", {}, `and ${failed.length - 10} more`) : null) : "";
  }

  statements({ method, settings, statements }) {
    const lines = [...statements, ...settings.flatMap((setting) => setting.statements)];
    const trends = settings.flatMap((setting) => setting.trends).filter((trend) => Math.abs(trend.spearman) >= 0.5);
    return h("div", { id: "study-says" }, h("h3", {}, "What the shapes say together"), h("ul", {}, lines.map((line) => h("li", {}, line)),
      trends.map((trend) => h("li", {}, `Mean time against ${trend.column}: rank correlation ${digits(trend.spearman, 2)} over ${trend.shapes} shapes${trend.p === null ? "" : `, p = ${digits(trend.p, 2)}`}.`))),
    h("p", { class: "small soft" }, method));
  }

  /** One dot a shape, one line a group, the median marked; one axis of time. */
  plot(rows) {
    if (rows.length < 2) return "";
    const groups = [...new Set(rows.map((row) => row.group))];
    const times = rows.map((row) => row.mean_time_s);
    const [low, high] = [0, Math.max(...times) * 1.05];
    const [factor, unit] = timeUnit(high);
    const [left, right, line, foot] = [150, 620, 44, 46];
    const x = (time) => left + ((time - low) / (high - low)) * (right - left);
    const bottom = groups.length * line + 8;
    const median = (values) => { const s = [...values].sort((a, b) => a - b); const k = (s.length - 1) / 2; return 0.5 * (s[Math.floor(k)] + s[Math.ceil(k)]); };
    const label = (at, y, text, anchor) => svg("text", { x: at, y, "text-anchor": anchor }, text);
    const parts = [svg("line", { class: "axis", x1: left, x2: right, y1: bottom, y2: bottom })];
    for (const tick of ticks(low / factor, high / factor, false, 5)) {
      parts.push(svg("line", { class: "axis", x1: x(tick * factor), x2: x(tick * factor), y1: bottom, y2: bottom + 5 }), label(x(tick * factor), bottom + 19, tickText(tick), "middle"));
    }
    parts.push(label(0.5 * (left + right), bottom + 38, `mean escape time (${unit})`, "middle"));
    groups.forEach((group, number) => {
      const members = rows.filter((row) => row.group === group);
      const y = 8 + (number + 0.5) * line;
      parts.push(label(left - 10, y + 4, (group || "all shapes").slice(0, 20), "end"));
      members.forEach((row, k) => parts.push(svg("circle", { class: "shape", cx: x(row.mean_time_s), cy: y + 9 * Math.sin(2.4 * k), r: 5 }, svg("title", {}, `${row.name}: ${timeText(row.mean_time_s)}`))));
      const middle = x(median(members.map((row) => row.mean_time_s)));
      parts.push(svg("line", { class: "middle", x1: middle, x2: middle, y1: y - 17, y2: y + 17 }, svg("title", {}, "median")));
    });
    const words = groups.map((group) => `${group || "all shapes"} ${timeText(median(rows.filter((row) => row.group === group).map((row) => row.mean_time_s)), 3)}`).join(", ");
    return svg("svg", { viewBox: `0 0 660 ${bottom + foot}`, role: "img", "aria-label": `Mean escape time of each shape by group; medians: ${words}`, id: "study-plot" }, parts);
  }
}
