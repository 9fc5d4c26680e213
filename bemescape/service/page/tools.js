// What stands on the view: the colour bar, the length bar, and the controls below.
import { bytes, cividis, magma } from "./maps.js";
import { byId, choice, h } from "./dom.js";
import { lengthText, position, roundDown, tickText, ticks } from "./scales.js";

export function drawBar(scale, exits, regions) {
  const place = byId("bar");
  place.hidden = !scale;
  if (!scale) return;
  const table = bytes(exits ? magma : cividis);
  const strip = h("canvas", { width: 1, height: 256 });
  const pen = strip.getContext("2d");
  const pixels = pen.createImageData(1, 256);
  for (let k = 0; k < 256; k += 1) pixels.data.set([table[3 * k], table[3 * k + 1], table[3 * k + 2], 255], 4 * (255 - k));
  pen.putImageData(pixels, 0, 0);
  const marks = ticks(scale.low / scale.factor, scale.high / scale.factor, scale.log).map((value) => {
    const mark = h("span", {}, tickText(value));
    mark.style.bottom = `${100 * position(scale, value * scale.factor)}%`;
    return mark;
  });
  place.replaceChildren(...[h("div", { class: "title" }, scale.title), h("div", { class: "scale" }, strip, h("div", { class: "ticks" }, marks)),
    exits ? null : h("div", { class: "key" }, h("i", { class: "window-colour" }), "window"),
    regions && !exits ? h("div", { class: "key" }, h("i", { class: "slow-colour" }), "slow region") : null].filter(Boolean));
  place.setAttribute("role", "img");
  place.setAttribute("aria-label", `${scale.title}, from ${tickText(scale.low / scale.factor)} to ${tickText(scale.high / scale.factor)}, ${scale.log ? "logarithmic" : "linear"}`);
}

export function drawLengthBar(stage) {
  const place = byId("scale-bar");
  if (!stage.panes.length || stage.flat) { place.hidden = true; return; }
  const length = roundDown(stage.pixel * 160);
  place.hidden = false;
  place.textContent = lengthText(length);
  place.style.width = `${length / stage.pixel}px`;
}

/** Shapes and the length bar keep clear of the controls, which may take two lines. */
export function measureTools(stage) {
  stage.below = byId("tools").offsetHeight;
  byId("scale-bar").style.bottom = `${stage.below + 14}px`;
  stage.redraw();
}

export function drawTools(app) {
  const { view, stage } = app;
  const place = byId("tools");
  place.hidden = !stage.panes.length || stage.flat;
  if (place.hidden) { drawLengthBar(stage); return; }
  const result = Boolean(stage.panes[0]?.arrays);
  const single = result && view.compare.length < 2;
  const tool = (text, control) => h("label", {}, text, control);
  const part = h("output", {}, `${view.slow} %`);
  const slow = h("input", { type: "range", id: "slow", min: "1", max: "50", value: String(view.slow), oninput: () => { view.slow = Number(slow.value); part.textContent = `${view.slow} %`; app.recolour(); app.askRegions(); app.link(); } });
  const at = h("input", { type: "range", id: "clip-at", min: "-1", max: "1", step: "0.02", value: String(view.at), disabled: !view.clip, "aria-label": "place of the cut",
    oninput: () => { view.at = Number(at.value); app.clip(); }, onchange: () => { app.section(); app.link(); } });
  place.replaceChildren(...[
    result ? tool("colour", choice([["time", "time on wall"], ["exits", "exits"]], view.colour, (e) => { view.colour = e.target.value; app.recolour(); app.link(); })) : null,
    result && view.colour === "time" ? tool("scale", choice([["linear", "linear"], ["log", "log"]], view.log ? "log" : "linear", (e) => { view.log = e.target.value === "log"; app.recolour(); app.section(); app.link(); })) : null,
    single ? tool("slowest", slow) : null, single ? part : null,
    tool("cut", choice([["", "off"], ["x", "x"], ["y", "y"], ["z", "z"]], view.clip ?? "", (e) => { view.clip = e.target.value || null; app.clip(); app.section(); app.link(); drawTools(app); byId("clip").focus(); })), at,
    single ? tool("inside", h("input", { type: "checkbox", id: "inside", checked: view.inside, disabled: !view.clip, onchange: (e) => { view.inside = e.target.checked; app.section(); app.link(); } })) : null,
    tool("shading", h("input", { type: "checkbox", checked: view.lit, onchange: (e) => { view.lit = e.target.checked; stage.setLight(view.lit); app.link(); } })),
    h("button", { type: "button", onclick: () => { stage.fit(); app.turned(); } }, "Whole shape"),
  ].filter(Boolean));
  measureTools(stage);
  place.querySelectorAll("select").forEach((select) => { select.id = { colour: "colour", scale: "scale", cut: "clip" }[select.parentElement.firstChild.textContent] ?? ""; });
}
