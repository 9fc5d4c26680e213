// Step 1: which shape, and whether it is sound.
import * as api from "./api.js";
import { choice, h, labelled, say } from "./dom.js";
import { lengthText } from "./scales.js";
import { Step } from "./step.js";

const UNITS = [["nm", "nanometres (nm)"], ["um", "micrometres (µm)"], ["other", "another length"]];
const HEALING = [["auto", "mend it safely"], ["none", "change nothing"], ["rebuild", "rebuild from voxels"]];

export class ShapeStep {
  constructor(app) {
    this.app = app;
    this.step = new Step("shape", 1, "Shape");
  }

  async choose() {
    this.step.state("bring a surface");
    this.step.open();
    const demos = await api.demos();
    this.step.show(this.form(), h("h3", {}, "Or a demo shape (invented data)"),
      h("div", { class: "demos" }, demos.map((demo) =>
        h("button", { type: "button", "data-demo": demo.name, onclick: (event) => this.busy(event.target, () => this.demo(demo)) },
          demo.name, h("small", {}, demo.text)))),
      this.kept());
  }

  kept() {
    const known = this.app.surfaces;
    if (!known.length) return null;
    return [h("h3", {}, "Or one of yours"), h("ul", { class: "plain", id: "kept" }, known.slice(0, 30).map((surface) =>
      h("li", { class: "row" }, h("button", { type: "button", class: "plain", onclick: () => this.app.openSurface(surface.id) }, `${surface.name} (${surface.faces} faces)`),
        h("button", { type: "button", class: "plain fixed", "aria-label": `delete ${surface.name}`, onclick: () => this.remove(surface) }, "delete"))))];
  }

  async remove(surface) {
    try {
      await api.deleteSurface(surface.id, false);
    } catch (error) {
      if (!error.body?.runs || !window.confirm(`${error.message}\n\nDelete ${surface.name} with ${error.body.runs.length} run(s)?`)) { say(error.message, { bad: true }); return; }
      await api.deleteSurface(surface.id, true);
    }
    await this.app.refresh();
    await this.app.close();
  }

  form() {
    const file = h("input", { type: "file", id: "file", accept: ".ply,.stl,.obj,.off,.glb,.vtp,.vtk", required: true });
    const other = h("input", { type: "text", id: "unit-text", placeholder: "4 nm, 4 nm, 40 nm" });
    const otherPlace = labelled("Length of one unit, or of x, y, z", other);
    otherPlace.hidden = true;
    const unit = choice(UNITS, "nm", () => { otherPlace.hidden = unit.value !== "other"; });
    unit.id = "unit";
    const heal = choice(HEALING, "auto");
    const send = h("button", { class: "main", id: "upload" }, "Read this surface");
    return h("form", { onsubmit: (event) => {
      event.preventDefault();
      this.busy(send, async () => {
        const chosen = file.files[0];
        if (!chosen) throw new Error("choose a mesh file first");
        const limit = this.app.session.limits.upload_bytes;
        if (chosen.size > limit) throw new Error(`the file has ${(chosen.size / 1e6).toFixed(0)} MB (limit ${limit / 1e6} MB)`);
        await this.read({ file: chosen, unit: unit.value === "other" ? other.value : unit.value }, heal.value);
      });
    } },
    labelled("Mesh file (PLY, STL, OBJ, OFF, GLB, VTP, VTK)", file),
    h("div", { class: "row" }, labelled("One unit of the file is", unit), labelled("Damage", heal)), otherPlace, send);
  }

  async read(sent, heal) {
    const surface = await api.upload(sent.file, sent.unit, heal);
    this.sent = { ...sent, id: surface.id };
    await this.app.refresh();
    await this.app.openSurface(surface.id);
  }

  async busy(button, action) {
    button.disabled = true;
    button.classList.add("busy");
    try { await action(); } catch (error) { say(error.message, { bad: true }); } finally { button.disabled = false; button.classList.remove("busy"); }
  }

  async demo(demo) {
    const surface = await api.useDemo(demo.name);
    await this.app.refresh();
    await this.app.openSurface(surface.id, demo.case);
  }

  /** What may still help a surface that mending did not close; the file is at hand if it was sent just now. */
  again(surface) {
    if (surface.solvable || surface.heal === "rebuild" || this.sent?.id !== surface.id) return null;
    return h("p", {}, h("button", { type: "button", id: "rebuild", onclick: (event) => this.busy(event.target, () => this.read(this.sent, "rebuild")) }, "Rebuild it from voxels"));
  }

  show(surface) {
    const size = surface.bounds_um[1].map((high, k) => lengthText(high - surface.bounds_um[0][k])).join(" × ");
    const findings = surface.health?.findings ?? [];
    const warned = findings.some(({ severity }) => severity === "warning");
    this.step.state(surface.name + (!surface.solvable ? "" : warned ? ": see the warning" : surface.healing_lines.length ? ", mended" : ""), { done: surface.solvable });
    this.step.open(!surface.solvable || warned);
    this.step.show(
      h("p", {}, h("strong", {}, surface.name), ` · ${surface.faces} faces · ${size}`),
      surface.volume_um3 === null ? null : h("p", { class: "soft small" }, `volume ${Number(surface.volume_um3.toPrecision(4))} µm³, area ${Number(surface.area_um2.toPrecision(4))} µm²`),
      h("p", { class: surface.solvable ? "good" : "bad", id: "verdict" }, surface.solvable ? (surface.healing_lines.length ? "Can be solved after mending." : "Sound: can be solved as it is.") : `Cannot be solved: ${surface.reason.replace("heal='rebuild'", "\u201crebuild from voxels\u201d")}`),
      this.again(surface),
      findings.length ? h("h3", {}, "As the file came") : null,
      findings.map((finding) => h("div", { class: `finding ${finding.severity}` }, finding.message, " ",
        finding.places_um?.length ? h("button", { type: "button", class: "plain", onclick: () => this.app.stage.fly(this.app.pane, finding.places_um[0]) }, "show where") : null)),
      surface.healing_lines.length ? [h("h3", {}, "What mending changed"), h("ul", { class: "small" }, surface.healing_lines.map((line) => h("li", {}, line)))] : null,
      h("div", { class: "row" },
        h("button", { type: "button", id: "other-shape", onclick: () => this.app.close() }, "Take another shape"),
        surface.solvable ? h("a", { class: "small", href: `api/surfaces/${surface.id}/healed.vtp`, download: "" }, "mended copy (VTP)") : null));
  }
}
