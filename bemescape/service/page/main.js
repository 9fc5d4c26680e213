// The page: which surface, run or comparison is open, and the view of it.
import * as api from "./api.js";
import { AnswerStep } from "./answer_step.js";
import { byId, h, later, say } from "./dom.js";
import { FlatStage, hasWebGL2 } from "./flat_stage.js";
import { linkOf, START, viewOf } from "./link.js";
import { OpeningsStep } from "./openings_step.js";
import { densityScale, position, slowLevel, timeScale, timeText, percentText } from "./scales.js";
import { ShapeStep } from "./shape_step.js";
import { Stage } from "./stage.js";
import { StudyView } from "./study_view.js";
import { drawBar, drawLengthBar, drawTools, measureTools } from "./tools.js";

class App {
  constructor() {
    this.view = viewOf(location.hash);
    this.surfaces = [];
    this.runs = [];
    this.studies = [];
    this.chosen = new Set();
    this.busy = 0;
    this.stage = hasWebGL2() ? new Stage(byId("view"), {
      onPick: (place, triangle, pane) => this.picked(place, triangle, pane),
      onHover: (place, triangle, pane) => this.hovered(place, triangle, pane),
      onTurn: () => this.turned(),
      onDraw: () => drawLengthBar(this.stage),
    }) : new FlatStage(byId("view"));
    this.study = new StudyView(this);
    this.shape = new ShapeStep(this);
    this.openings = new OpeningsStep(this);
    this.answer = new AnswerStep(this);
    this.askRegions = later(() => this.regions(), 300);
    new ResizeObserver(() => requestAnimationFrame(() => {
      measureTools(this.stage);
      if (this.view.compare.length > 1) this.rename?.();
    })).observe(byId("stage"));
    window.addEventListener("signed-out", () => this.signIn());
    window.addEventListener("hashchange", () => { if (location.hash !== this.linked) this.open(viewOf(location.hash)); });
  }

  get pane() { return this.stage.panes[0]; }

  async begin() {
    this.session = await api.session();
    if (this.session.token_needed && !this.session.signed_in) { this.signIn(); return; }
    await this.refresh();
    await this.open(this.view);
  }

  signIn() {
    const place = byId("sign-in");
    if (place.open) return;
    const token = h("input", { type: "password", id: "token", autocomplete: "off", required: true });
    const wrong = h("p", { class: "say bad", role: "alert" });
    place.replaceChildren(h("form", { onsubmit: async (event) => {
      event.preventDefault();
      try {
        await api.signIn(token.value);
        place.close();
        await this.begin();
      } catch (error) { wrong.textContent = error.message; }
    } }, h("h2", { id: "sign-in-title" }, "A token is needed"), h("p", {}, "Whoever runs this service has given you one."), h("label", {}, "token", token), wrong, h("button", { class: "main" }, "Sign in")));
    place.showModal();
  }

  async refresh() {
    [this.surfaces, this.runs, this.studies] = await Promise.all([api.surfaces(), api.runs(), api.studies()]);
    this.shelf();
  }

  link() {
    this.linked = linkOf(this.view);
    history.replaceState(null, "", this.linked === "#" ? location.pathname : this.linked);
  }

  /** Show what a link says; what has been deleted is said and left out. */
  async open(view) {
    this.view = view;
    try {
      if (view.study) await this.openStudy(view.study);
      else if (view.compare.length > 1) await this.compare(view.compare, view);
      else if (view.run) await this.openRun(view.run, view);
      else if (view.surface) await this.openSurface(view.surface, null, view);
      else await this.close();
    } catch (error) {
      say(error.message, { bad: true });
      await this.close();
    }
  }

  async close() {
    this.leave();
    this.view = { ...START };
    this.stage.reset();
    byId("welcome").hidden = false;
    drawBar(null);
    drawTools(this);
    this.openings.lock();
    this.answer.lock();
    this.link();
    this.shelf();
    await this.shape.choose();
  }

  leave() {
    this.study.hide();
    this.shown = null;
    this.stopWatching?.();
    this.stopWatching = null;
    this.scale = null;
    byId("pointer").textContent = "";
    byId("panes").replaceChildren();
  }

  // -- a surface -------------------------------------------------------------------------------------------------------

  async openSurface(id, given = null, view = null) {
    this.leave();
    const [surface, mesh] = await Promise.all([api.surface(id), api.surfaceMesh(id)]);
    this.view = { ...START, ...(view ?? {}), surface: id, run: null, compare: [] };
    byId("welcome").hidden = true;
    say("");
    this.surface = surface;
    this.stage.showSurface(mesh);
    this.stage.about({ surface: id, windows: [] });
    this.look();
    drawBar(null);
    const bad = (surface.health?.findings ?? []).filter((finding) => finding.severity !== "note").flatMap((finding) => finding.places_um ?? []);
    this.stage.mark(this.pane, bad, 0xb3001b, 0.014 * this.stage.reach);
    if (!surface.solvable && bad.length && !this.view.camera) this.stage.fly(this.pane, bad[0]);
    this.shape.show(surface);
    this.openings.show(surface, given);
    this.answer.lock();
    drawTools(this);
    this.clip();
    this.link();
    this.shelf();
  }

  look() {
    if (this.view.camera) this.stage.view = this.view.camera;
    else this.stage.fit();
    this.stage.setLight(this.view.lit);
  }

  // -- a run -----------------------------------------------------------------------------------------------------------

  async openRun(id, view = null) {
    const run = await api.run(id);
    if (this.view.surface !== run.surface || !this.stage.panes.length || this.view.run || view) await this.openSurface(run.surface, run.order, view);
    this.view = { ...this.view, ...(view ?? {}), surface: run.surface, run: id, compare: [] };
    this.link();
    this.shelf();
    if (run.state === "done") await this.showResult(run);
    else {
      this.openings.step.open(false);
      this.answer.progress(run);
      byId("steps").scrollTop = 0;
    }
    if (["failed", "cancelled"].includes(run.state)) { drawTools(this); return; }
    if (run.state === "done" && !["waiting", "running"].includes(run.pictures)) return;
    this.stopWatching?.();
    this.stopWatching = api.watch(id, {
      onRun: async (record) => {
        if (this.view.run !== id) return;
        if (record.state === "done") { if (this.shown === id) { this.answer.update(record); if (this.stage.flat) this.stage.about({ runs: [record] }); } else await this.showResult(record); } else this.answer.progress(record);
        await this.refresh();
      },
      onProgress: (event) => { if (this.view.run === id && this.shown !== id) this.answer.progress({ ...run, state: "running" }, event); },
    });
  }

  async showResult(run) {
    this.shown = run.id;
    const [summary, mesh] = await Promise.all([api.summary(run.id), api.runMesh(run.id)]);
    if (this.view.run !== run.id) return;
    byId("welcome").hidden = true;
    const camera = this.view.camera ?? (this.pane ? this.stage.view : null);
    this.stage.reset();
    const pane = this.stage.addResult(mesh);
    this.stage.about({ runs: [run] });
    this.view.camera = camera;
    this.look();
    const starts = Object.values(run.order.start?.points ?? {}).map((place) => place.map((v, k) => v * this.surface.unit_um[k]));
    this.stage.mark(pane, starts, 0x101418, 0.012 * this.stage.reach);
    this.openings.step.open(false);
    this.shape.step.open(false);
    this.answer.show(run, summary);
    byId("steps").scrollTop = 0;
    this.recolour();
    this.clip();
    drawTools(this);
    this.link();
    await Promise.all([this.regions(), this.section()]);
  }

  /** Colours after any change of scale, part or kind; no traffic. */
  recolour() {
    const exits = this.view.colour === "exits";
    if (!this.stage.panes.length || !this.stage.panes[0].arrays) return;
    const scales = this.stage.panes.map((pane) => (exits ? densityScale(pane.arrays) : timeScale(pane.arrays, this.view.log)));
    const [first] = scales;
    this.scale = { ...first, low: Math.min(...scales.map((s) => s.low)), high: Math.max(...scales.map((s) => s.high)) };
    if (scales.length > 1 && !exits) {
      // One unit for all: that of the slowest.
      const slowest = scales.find((s) => s.high === this.scale.high);
      Object.assign(this.scale, { factor: slowest.factor, title: slowest.title });
    }
    const regions = this.view.showSlow && this.stage.panes.length === 1;
    for (const pane of this.stage.panes) this.stage.colour(pane, { scale: this.scale, exits, level: slowLevel(pane.arrays, this.view.slow / 100), regions });
    drawBar(this.scale, exits, regions);
    if (exits === Boolean(byId("scale"))) drawTools(this); // exits have one scale only
  }

  async regions() {
    const id = this.view.run;
    if (!id || this.shown !== id || this.view.compare.length > 1) return;
    const part = this.view.slow / 100;
    try {
      const found = await api.slowRegions(id, part);
      if (this.view.run === id && part === this.view.slow / 100) this.answer.showRegions(found);
    } catch (error) { say(error.message, { bad: true }); }
  }

  clip() { this.stage.setClip(this.view.clip, this.view.at); if (!this.view.clip && this.pane) this.stage.hideSection(this.pane); }

  /** The time on the cut, from the service. */
  async section() {
    const { view, pane } = this;
    if (!pane?.arrays || view.compare.length > 1) return;
    if (!view.clip || !view.inside) { this.stage.hideSection(pane); return; }
    const { point, normal } = this.stage.clipPlane(pane, view.clip);
    const asked = (this.asked = `${view.run} ${view.clip} ${view.at}`);
    try {
      const found = await api.section(view.run, point, normal);
      if (asked === this.asked && pane === this.pane) {
        this.stage.showSection(pane, found, view.colour === "exits" ? timeScale(pane.arrays, view.log) : this.scale, position);
        this.sectionShown = asked;
      }
    } catch (error) { say(error.message, { bad: true }); }
  }

  // -- a study ---------------------------------------------------------------------------------------------------------

  async openStudy(id) {
    const record = await api.study(id);
    this.leave();
    this.view = { ...START, study: id };
    this.stage.reset();
    byId("welcome").hidden = true;
    drawBar(null);
    drawTools(this);
    this.shape.step.state(`${record.rows.length} shapes`, { done: true });
    this.shape.step.show(h("button", { type: "button", onclick: () => this.close() }, "Take another shape"));
    this.shape.step.open(false);
    this.openings.step.state("one rule for all", { locked: true });
    this.answer.lock();
    this.link();
    this.shelf();
    await this.study.show(record);
  }

  // -- comparison ------------------------------------------------------------------------------------------------------

  async compare(ids, view = null) {
    const wanted = ids.slice(0, 4);
    const [table, ...meshes] = await Promise.all([api.comparison(wanted), ...wanted.map(api.runMesh)]);
    this.leave();
    this.view = { ...START, ...(view ?? {}), run: null, surface: null, compare: wanted };
    this.shown = null;
    byId("welcome").hidden = true;
    this.stage.reset(wanted.length);
    for (const mesh of meshes) this.stage.addResult(mesh);
    if (this.stage.flat) this.stage.about({ runs: await Promise.all(wanted.map(api.run)) });
    this.look();
    this.recolour();
    this.shape.step.state(`${wanted.length} runs`, { done: true });
    this.shape.step.show(h("button", { type: "button", onclick: () => this.close() }, "Take another shape"));
    this.shape.step.open(false);
    this.openings.step.state("", { locked: true });
    this.answer.comparison(table);
    this.clip();
    drawTools(this);
    this.namePanes(table.rows);
    this.link();
    this.shelf();
  }

  namePanes(rows) {
    const place = byId("panes");
    place.replaceChildren(...this.stage.areas.map(([l, t, w, hh], k) => {
      const box = h("div", {}, rows[k].name, h("small", {}, `${timeText(rows[k].mean_time_s)} ± ${percentText(rows[k].relative_error)}`));
      Object.assign(box.style, { left: `${l}px`, top: `${t}px`, width: `${w}px`, height: `${hh}px` });
      return box;
    }));
    this.rename = () => this.namePanes(rows);
  }

  // -- the shelf of results ----------------------------------------------------------------------------------------------

  shelf() {
    const place = byId("shelf");
    const chosen = [...this.chosen].filter((id) => this.runs.some((run) => run.id === id && run.state === "done"));
    this.chosen = new Set(chosen);
    place.replaceChildren(h("h2", { id: "shelf-title" }, "Results"), h("div", { class: "body" },
      this.runs.length ? h("ul", { class: "plain", id: "runs" }, this.runs.slice(0, 100).map((run) => this.shelfRow(run))) : h("p", { class: "soft small" }, "None yet. They stay here, also after a restart."),
      chosen.length ? h("button", { type: "button", id: "compare", disabled: chosen.length < 2 || chosen.length > 4, onclick: () => this.compare(chosen).catch((error) => say(error.message, { bad: true })) },
        chosen.length < 2 ? "Choose a second run to compare" : chosen.length > 4 ? "At most four side by side" : `Compare ${chosen.length} side by side`) : null,
      this.studies.length ? [h("h3", {}, "Studies"), h("ul", { class: "plain", id: "studies" }, this.studies.slice(0, 50).map((entry) => this.study.shelfRow(entry)))] : null));
  }

  shelfRow(run) {
    const text = run.state === "done" ? timeText(run.answer.mean_time_s) : this.answer.state(run);
    return h("li", { class: run.id === this.view.run ? "current" : "", "data-run": run.id },
      h("input", { type: "checkbox", "aria-label": `compare ${run.name}`, disabled: run.state !== "done", checked: this.chosen.has(run.id), onchange: (event) => {
        if (event.target.checked) this.chosen.add(run.id); else this.chosen.delete(run.id);
        this.shelf();
        byId("runs").querySelector(`[data-run="${run.id}"] input`)?.focus();
      } }),
      h("button", { type: "button", class: "plain name", title: run.name, onclick: () => this.openRun(run.id).catch((error) => say(error.message, { bad: true })) }, run.name), h("span", {}, text),
      h("button", { type: "button", class: "plain", "aria-label": `delete ${run.name}`, disabled: ["queued", "running"].includes(run.state), onclick: async () => {
        if (!window.confirm(`Delete ${run.name}?`)) return;
        try { await api.deleteRun(run.id); await this.refresh(); if (this.view.run === run.id || this.view.compare.includes(run.id)) await this.close(); } catch (error) { say(error.message, { bad: true }); }
      } }, "delete"));
  }

  // -- pointer ---------------------------------------------------------------------------------------------------------

  picked(place, triangle, pane) {
    // Also on an answer: its openings can be changed and computed again.
    if (!this.openings.pick(place)) this.tell(place, triangle, pane);
  }

  hovered(place, triangle, pane) {
    this.openings.hover(place);
    this.tell(place, triangle, pane);
  }

  tell(place, triangle, pane) {
    const target = byId("pointer");
    if (!place) { target.textContent = ""; return; }
    const at = `(${pane.toFrame(place).map((v) => v.toPrecision(3)).join(", ")}) µm`;
    if (!pane.arrays) { target.textContent = at; return; }
    const number = pane.arrays.window[triangle];
    const value = number >= 0 ? `${pane.header.windows[number]}, ${pane.arrays.exit_density_per_um2[triangle].toPrecision(3)} of all exits per µm²` : timeText(pane.arrays.time_s[triangle]);
    target.textContent = `${value} at ${at}`;
  }

  turned() {
    this.view.camera = this.stage.view;
    this.link();
  }
}

const app = new App();
// For tests: what is shown, to be read and not to be changed.
window.bemescape = {
  get view() { return structuredClone(app.view); },
  get surface() { return app.pane?.geometry ? app.pane.geometry.getAttribute("position").count / 3 : 0; },
  get windows() { return structuredClone(app.pane?.windows ?? []); },
  get shown() { return app.shown ?? null; },
  get section() { return app.sectionShown ?? null; },
  get panes() { return app.stage.panes.length; },
  get study() { return structuredClone(app.study.record ?? null); },
  get scale() { return app.scale ? structuredClone(app.scale) : null; },
  get drawn() { return app.stage.drawn; },
  get firstPicture() { return app.stage.firstPicture ?? null; },
  /** The place of the wall that a click on the way to `place` would meet. */
  under: (place) => {
    const found = app.stage.hit(...app.stage.onScreen(place));
    return found ? found.pane.toFrame(found.place) : null;
  },
  onScreen: (place) => app.stage.onScreen(place),
};
app.begin().catch((error) => say(error.message, { bad: true }));
