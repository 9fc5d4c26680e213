// Step 2: where the openings are, how fast the molecule moves, how good the answer must be.
import * as api from "./api.js";
import { choice, h, labelled, later, say } from "./dom.js";
import { lengthText } from "./scales.js";
import { Step } from "./step.js";

const KINDS = [["disc", "round"], ["labels", "by label"], ["points", "pores (CSV)"], ["scatter", "pores, random"], ["lid", "flat lid"], ["near", "near another surface"]];
const ACCURACY = [["5 %", "quick look (5 %)"], ["1 %", "good (1 %)"], ["0.5 %", "fine (0.5 %)"], ["other", "another error"]];

const number = (value, name) => {
  const found = Number(String(value).replace(",", "."));
  if (!Number.isFinite(found) || String(value).trim() === "") throw new Error(`${name} should be a number`);
  return found;
};

export class OpeningsStep {
  constructor(app) {
    this.app = app;
    this.step = new Step("openings", 2, "Openings");
    this.windows = [];
    this.starts = [];
    this.given = { accuracy: {}, start: {} };
    this.placing = null;
    this.preview = later(() => this.ask(), 250);
  }

  lock() {
    this.step.state("after the shape", { locked: true });
    this.step.show();
    this.placing = null;
  }

  /** For a surface, with the openings of a case or of an earlier order. */
  show(surface, given = null) {
    this.surface = surface;
    this.unit = surface.unit_um;
    // What the page has no fields for, like a panel budget or regions to start from, stays as it was given.
    this.given = { accuracy: given?.accuracy ?? {}, start: given?.start ?? {} };
    this.windows = (given?.window ?? []).map((window) => this.fromCase(window));
    this.name = given?.name ?? surface.name;
    this.starts = Object.entries(given?.start?.points ?? {}).map(([name, place]) => ({ name, place: this.toUm(place) }));
    this.diffusion = given ? String(given.motion.diffusion).replace(/\s*(um|µm)\^2\/s/, "") : "20";
    this.target = given?.accuracy?.target ?? "0.5 %";
    this.placing = null;
    if (!surface.solvable) { this.lock(); return; }
    this.step.state(given ? counted(this.windows.length) : "place the windows", { done: Boolean(given) });
    this.step.open();
    this.draw();
    this.ask();
  }

  toUm(place) { return place.map((value, k) => Number((value * this.unit[k]).toPrecision(7))); }
  toFile(place) { return place.map((value, k) => Number((value / this.unit[k]).toPrecision(9))); }

  fromCase(window) {
    const kind = KINDS.map(([key]) => key).find((key) => window[key]);
    const part = window[kind];
    const fields = { name: window.name, kind, permeability: window.permeability ?? "" };
    if (kind === "disc") Object.assign(fields, { centre: this.toUm(part.centre), radius: part.radius });
    if (kind === "labels") Object.assign(fields, { array: part.array, value: part.value });
    if (kind === "points") Object.assign(fields, { file: part.file, fileName: "uploaded list", radius: part.radius });
    if (kind === "scatter") Object.assign(fields, { count: part.count, radius: part.radius, gap: part.gap ?? "", seed: part.seed ?? 0 });
    if (kind === "lid") Object.assign(fields, { centre: this.toUm(part.point), normal: part.normal });
    if (kind === "near") Object.assign(fields, { other: part.file, distance: part.distance });
    return fields;
  }

  toCase(w) {
    const base = { name: w.name };
    if (String(w.permeability).trim()) base.permeability = withUnit(w.permeability, "um/s");
    if (w.kind === "disc") base.disc = { centre: this.toFile(w.centre.map((v) => number(v, "a coordinate"))), radius: withUnit(w.radius, "nm") };
    if (w.kind === "labels") base.labels = { array: w.array, value: number(w.value, "the label") };
    if (w.kind === "points") {
      if (!w.file) throw new Error(`${w.name}: choose the CSV file`);
      base.points = { file: w.file, radius: withUnit(w.radius, "nm") };
    }
    if (w.kind === "scatter") {
      base.scatter = { count: number(w.count, "the number of pores"), radius: withUnit(w.radius, "nm"), seed: number(w.seed, "the seed") };
      if (String(w.gap).trim()) base.scatter.gap = withUnit(w.gap, "nm");
    }
    if (w.kind === "lid") base.lid = { point: this.toFile(w.centre.map((v) => number(v, "a coordinate"))), normal: w.normal.map((v) => number(v, "the direction")) };
    if (w.kind === "near") {
      if (!w.other) throw new Error(`${w.name}: choose the other surface`);
      base.near = { file: w.other, distance: withUnit(w.distance, "nm") };
    }
    return base;
  }

  order() {
    const points = Object.fromEntries(this.starts.map(({ name, place }) => [name, this.toFile(place.map((v) => number(v, "a start")))]));
    return { surface: this.surface.id, name: String(this.name).trim() || this.surface.name, motion: { diffusion: withUnit(this.diffusion, "um^2/s") }, window: this.windows.map((w) => this.toCase(w)),
      accuracy: { ...this.given.accuracy, target: this.target }, start: { ...this.given.start, points } };
  }

  // -- placing ---------------------------------------------------------------------------------------------------------

  add() {
    const labels = this.surface.label_arrays[0];
    const taken = new Set(this.windows.map((w) => w.name));
    let k = 1;
    while (taken.has(`window ${k}`)) k += 1;
    const box = this.surface.bounds_um;
    const size = Math.max(...box[1].map((high, axis) => high - box[0][axis]));
    const middle = box[0].map((low, axis) => Number((0.5 * (low + box[1][axis])).toPrecision(6)));
    const value = labels?.values.find((entry) => entry.value !== 0)?.value ?? labels?.values[0].value;
    this.windows.push({ name: `window ${k}`, kind: "disc", centre: middle, radius: lengthText(0.06 * size, 2).replace("µm", "um"), permeability: "",
      array: labels?.name, value, normal: [0, 0, -1], count: 10, gap: "", seed: 1, distance: "20 nm", placed: false });
    this.placing = this.windows.length - 1;
    this.draw();
    say("Click on the wall where the window should be, or type its centre.");
  }

  /** A click on the wall. */
  pick(place) {
    const w = this.windows[this.placing];
    if (!w) return false;
    w.centre = this.app.pane.toFrame(place).map((v) => Number(v.toPrecision(6)));
    w.placed = true;
    this.placing = null;
    this.app.stage.setPatch(null, 0);
    this.draw();
    this.ask();
    return true;
  }

  hover(place) {
    const w = this.windows[this.placing];
    if (w) this.app.stage.setPatch(place, w.kind === "disc" ? micrometres(w.radius) : 0);
  }

  /** The true masks from the service; a refusal is said where the openings are. */
  async ask() {
    const { pane, stage } = this.app;
    const turn = (this.turn = (this.turn ?? 0) + 1);
    const ready = this.windows.length > 0 && this.windows.every((w) => w.placed !== false);
    if (!ready) { stage.hideWindows(pane); this.say(this.windows.length ? "" : "No window yet: nothing can leave."); this.ok(false); return; }
    try {
      const found = await api.placeWindows(this.surface.id, this.windows.map((w) => this.toCase(w)));
      if (turn !== this.turn) return;
      // The answer may have come in between; then its own windows are shown.
      if (pane === this.app.pane) stage.showWindows(pane, found);
      this.places = found.header.windows;
      if (pane === this.app.pane) stage.about({ surface: this.surface.id, windows: this.windows.map((w) => this.toCase(w)) });
      const { windows, notes } = found.header;
      const area = windows.reduce((sum, w) => sum + w.area_um2, 0);
      this.say([`${windows.length} window${windows.length > 1 ? "s" : ""}, ${Number(area.toPrecision(4))} µm² in all.`, ...notes].join(" "));
      this.ok(true);
    } catch (error) {
      if (turn !== this.turn) return;
      stage.hideWindows(pane);
      this.say(error.message, true);
      this.ok(false);
    }
  }

  say(text, bad = false) {
    if (!this.saying) return;
    this.saying.textContent = text;
    this.saying.classList.toggle("bad", bad);
  }

  ok(fine) {
    this.fine = fine;
    if (this.start) this.start.disabled = !fine;
    this.step.state(fine ? counted(this.windows.length) : "place the windows", { done: fine });
  }

  // -- fields ----------------------------------------------------------------------------------------------------------

  draw() {
    if (this.starts.length) this.markStarts();
    this.saying = h("p", { class: "say", role: "status", id: "windows-say" });
    this.start = h("button", { class: "main", id: "run", disabled: !this.fine, onclick: () => this.run() }, "Compute the escape time");
    this.step.show(
      this.windows.map((w, k) => this.card(w, k)),
      h("button", { type: "button", id: "add-window", onclick: () => this.add() }, this.windows.length ? "Add another window" : "Add a window"),
      this.saying, h("h3", {}, "Molecule and accuracy"),
      h("div", { class: "row" },
        labelled("Diffusion D (µm²/s)", this.input(this, "diffusion", { id: "diffusion", inputmode: "decimal" })),
        labelled("Error allowed", this.accuracy())),
      h("details", { open: this.starts.length > 0 }, h("summary", {}, `Named starts (${this.starts.length})`), this.startRows()),
      labelled("Name of this run", this.input(this, "name", { id: "run-name", maxlength: "60" })),
      h("p", {}, this.start),
      this.app.study.form(this.surface, () => this.order()));
  }

  accuracy() {
    const known = ACCURACY.some(([key]) => key === this.target);
    const own = this.input(this, "target", { "aria-label": "error allowed, like 2 %", id: "target-text" });
    own.hidden = known;
    const select = choice(ACCURACY, known ? this.target : "other", () => {
      own.hidden = select.value !== "other";
      if (select.value !== "other") this.target = select.value; else { this.target = "2 %"; own.value = this.target; }
    });
    select.id = "target";
    return h("span", {}, select, own);
  }

  input(object, key, attributes = {}, changed = () => {}) {
    return h("input", { type: "text", value: String(object[key] ?? ""), ...attributes, oninput: (event) => { object[key] = event.target.value; changed(); } });
  }

  triple(values, names, changed) {
    return h("div", { class: "row" }, names.map((name, k) => labelled(name, this.input(values, k, { inputmode: "decimal", "data-axis": "xyz"[k] }, changed))));
  }

  startRows() {
    const box = this.surface.bounds_um;
    return [this.starts.map((start, k) => h("div", { class: "start" }, h("div", { class: "row" }, labelled("name", this.input(start, "name")),
      h("button", { type: "button", class: "plain", "aria-label": `remove start ${start.name}`, onclick: () => { this.starts.splice(k, 1); this.draw(); this.ask(); } }, "remove")),
      this.triple(start.place, ["x (µm)", "y (µm)", "z (µm)"], () => this.markStarts()))),
    h("button", { type: "button", class: "plain", onclick: () => {
      this.starts.push({ name: `start ${this.starts.length + 1}`, place: box[0].map((low, axis) => Number((0.5 * (low + box[1][axis])).toPrecision(4))) });
      this.draw();
      this.ask();
    } }, "add a start inside")].flat();
  }

  card(w, k) {
    const changed = () => { w.placed = true; this.preview(); };
    const kinds = KINDS.filter(([key]) => key !== "labels" || this.surface.label_arrays.length);
    const content = [];
    if (w.kind === "disc") {
      content.push(this.triple(w.centre, ["centre x (µm)", "y (µm)", "z (µm)"], changed),
        h("div", { class: "row" }, labelled("radius", this.input(w, "radius", { "data-field": "radius" }, changed)), this.clicker(k)));
    } else if (w.kind === "labels") {
      const arrays = this.surface.label_arrays;
      const values = arrays.find((array) => array.name === w.array)?.values ?? [];
      content.push(h("div", { class: "row" },
        labelled("array", choice(arrays.map((a) => [a.name, a.name]), w.array, (event) => { w.array = event.target.value; w.value = arrays.find((a) => a.name === w.array).values[0].value; this.draw(); changed(); })),
        labelled("value", choice(values.map((v) => [String(v.value), `${v.value} (${v.count})`]), String(w.value), (event) => { w.value = event.target.value; changed(); }))));
    } else if (w.kind === "points") {
      content.push(h("p", { class: "small" }, w.file ? w.fileName : "columns x, y, z, in units of the mesh file unless the file says otherwise"),
        h("div", { class: "row" }, labelled("CSV file", h("input", { type: "file", accept: ".csv,.tsv,.txt", "data-field": "csv", onchange: async (event) => {
          try {
            const list = await api.uploadPositions(event.target.files[0]);
            Object.assign(w, { file: list.id, fileName: `${list.name}: ${list.rows} positions`, placed: true });
            this.draw();
            this.ask();
          } catch (error) { say(error.message, { bad: true }); }
        } })), labelled("radius", this.input(w, "radius", {}, changed))));
    } else if (w.kind === "scatter") {
      content.push(h("div", { class: "row" }, labelled("number", this.input(w, "count", {}, changed)), labelled("radius", this.input(w, "radius", {}, changed)),
        labelled("gap", this.input(w, "gap", { placeholder: "one radius" }, changed)), labelled("seed", this.input(w, "seed", {}, changed))));
    } else if (w.kind === "lid") {
      content.push(this.triple(w.centre, ["point x (µm)", "y (µm)", "z (µm)"], changed), this.triple(w.normal, ["direction cut off: x", "y", "z"], changed), this.clicker(k));
    } else content.push(...this.near(w, changed));
    return h("div", { class: "window", "data-window": String(k) },
      h("div", { class: "row" }, labelled("name", this.input(w, "name", { "data-field": "name" }, changed)),
        labelled("kind", choice(kinds, w.kind, (event) => {
          w.kind = event.target.value;
          w.placed = !["disc", "lid"].includes(w.kind) || w.placed !== false;
          if ((w.kind === "points" && !w.file) || (w.kind === "near" && !w.other)) w.placed = false;
          this.draw();
          this.ask();
        }))),
      content,
      h("div", { class: "row" },
        labelled("permeability κ (µm/s)", this.input(w, "permeability", { inputmode: "decimal", placeholder: "absorbs all" }, changed)),
        h("button", { type: "button", class: "plain", "aria-label": `show ${w.name}`, onclick: () => this.fly(w) }, "show"),
        h("button", { type: "button", class: "plain", "aria-label": `remove ${w.name}`, onclick: () => { this.windows.splice(k, 1); this.placing = null; this.draw(); this.ask(); } }, "remove")));
  }

  /** The part of the wall within a distance of another surface, such as a neighbouring cell's membrane. */
  near(w, changed) {
    const others = this.app.surfaces.filter((surface) => surface.id !== this.surface.id);
    const known = others.some((surface) => surface.id === w.other);
    return [h("div", { class: "row" },
      labelled("other surface", choice([...(known ? [] : [["", others.length ? "choose…" : "none yet"]]), ...others.map((s) => [s.id, s.name])], w.other ?? "", (event) => { w.other = event.target.value; this.draw(); changed(); })),
      labelled("within", this.input(w, "distance", { "data-field": "distance" }, changed))),
    labelled("or bring its mesh, in the unit of this file", h("input", { type: "file", accept: ".ply,.stl,.obj,.off,.glb,.vtp,.vtk", "data-field": "near", onchange: async (event) => {
      try {
        const unit = Array.isArray(this.surface.unit) ? this.surface.unit.join(", ") : this.surface.unit;
        const other = await api.upload(event.target.files[0], unit, "none");
        await this.app.refresh();
        w.other = other.id;
        this.draw();
        changed();
      } catch (error) { say(error.message, { bad: true }); }
    } }))];
  }

  /** Turn the view to a window; several pores of one name share its card. */
  fly(w) {
    const found = (this.places ?? []).find(({ name }) => name === w.name || name.startsWith(`${w.name}[`));
    if (found) this.app.stage.fly(this.app.pane, found.place_um);
    else say("It is not on the wall yet.");
  }

  markStarts() {
    const { stage, pane } = this.app;
    stage.clearMarks(pane);
    const places = this.starts.map(({ place }) => place.map((v) => Number(String(v).replace(",", ".")))).filter((place) => place.every(Number.isFinite));
    stage.mark(pane, places, 0x101418, 0.012 * stage.reach);
  }

  clicker(k) {
    return h("button", { type: "button", class: "fixed", "aria-pressed": String(this.placing === k), "data-field": "click", onclick: () => {
      this.placing = this.placing === k ? null : k;
      this.app.stage.setPatch(null, 0);
      this.draw();
      this.ask();
    } }, this.placing === k ? "click on the wall…" : "place by a click");
  }

  async run() {
    try {
      this.start.disabled = true;
      const run = await api.startRun(this.order());
      await this.app.refresh();
      await this.app.openRun(run.id);
    } catch (error) {
      say(error.message, { bad: true });
    } finally {
      this.start.disabled = !this.fine;
    }
  }
}

const counted = (count) => `${count} window${count === 1 ? "" : "s"}`;

/** What was typed, with the unit that stands beside the field unless another was typed. */
function withUnit(text, unit) {
  const plain = String(text).trim().replace(",", ".").replace("µ", "u").replace("²", "^2");
  return /^[-+]?[\d.]+(e[-+]?\d+)?$/i.test(plain) ? `${plain} ${unit}` : plain;
}

/** A typed length for the preview under the pointer; the service reads it properly. */
function micrometres(text) {
  const [, value, unit] = /^\s*([\d.,]+)\s*(nm|um|µm|)\s*$/.exec(String(text)) ?? [null, "0", "nm"];
  return Number(value.replace(",", ".")) * (unit === "um" || unit === "µm" ? 1 : 1e-3);
}
