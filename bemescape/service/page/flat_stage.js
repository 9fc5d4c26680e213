// In place of the 3D view where the browser has no WebGL 2: pictures drawn by the service. Everything else works by fields.
import * as api from "./api.js";
import { choice, h, say } from "./dom.js";

const NAMES = { view_front: "front", view_side: "side", view_top: "top", windows: "windows", cutaway: "cut open" };
const SIDES = { front: [0, -1, 0.25], right: [1, 0, 0.25], back: [0, 1, 0.25], left: [-1, 0, 0.25], top: [0, -0.2, 1], bottom: [0, -0.2, -1] };

export const hasWebGL2 = () => document.createElement("canvas").getContext("webgl2") !== null;

/** The calls of `Stage` that make sense for a picture; the others do nothing. */
export class FlatStage {
  constructor(canvas) {
    canvas.hidden = true;
    this.image = h("img", { id: "flat", alt: "" });
    this.chooser = h("div", { id: "flat-views" });
    canvas.after(this.image, this.chooser);
    this.panes = [];
    this.drawn = 0;
    this.below = 0;
    this.side = "front";
    this.image.addEventListener("load", () => { this.drawn += 1; });
  }

  get flat() { return true; }
  get reach() { return 1; }
  get view() { return null; }
  set view(_) { /* the side is chosen by name */ }
  get areas() { return []; }

  reset() {
    this.panes = [];
    this.what = null;
    this.image.hidden = true;
    this.chooser.replaceChildren();
  }

  showSurface({ header }) {
    this.panes = [{ offset: header.offset_um, windows: [], flat: true }];
    return this.panes[0];
  }

  addResult({ header }) {
    this.panes.push({ offset: header.offset_um, header, flat: true });
    return this.panes.at(-1);
  }

  showWindows(pane, { header }) { pane.windows = header.windows; }
  hideWindows(pane) { pane.windows = []; }

  /** What there is to see: a surface with its windows, or runs. */
  about(what) {
    this.what = what;
    this.show().catch((error) => say(error.message, { bad: true }));
  }

  async show() {
    const { surface, windows, runs } = this.what;
    const options = runs ? runs.flatMap((run) => run.files.filter((name) => name.replace(".png", "") in NAMES)
      .map((name) => [api.fileUrl(run.id, name), `${runs.length > 1 ? `${run.name}: ` : ""}${NAMES[name.replace(".png", "")]}`])) : Object.keys(SIDES).map((side) => [side, side]);
    const draw = async (chosen) => {
      const asked = this.what;
      let source = chosen;
      if (!runs) {
        this.side = chosen;
        source = URL.createObjectURL(await api.surfacePicture(surface, { window: windows, towards: SIDES[chosen] }));
      }
      if (asked !== this.what) return;
      this.image.hidden = false;
      this.image.alt = options.find(([key]) => key === chosen)[1];
      this.image.src = source;
    };
    const first = runs ? options[0]?.[0] : this.side;
    this.chooser.replaceChildren(h("p", {}, "This browser has no WebGL 2, so the service draws the pictures. Windows are placed by their fields. "),
      options.length ? h("label", {}, "seen from ", choice(options, first, (event) => draw(event.target.value).catch((error) => say(error.message, { bad: true })))) : h("span", { class: "busy" }, "The pictures follow."));
    if (first) await draw(first);
  }

  async picture() { return (await fetch(this.image.src)).blob(); }

  fit() {}
  fly() {}
  mark() {}
  clearMarks() {}
  colour() {}
  redraw() {}
  setLight() {}
  setPatch() {}
  setClip() {}
  hideSection() {}
}
