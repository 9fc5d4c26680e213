// What is shown, as text behind the # of the address: a view can be shared with whoever may see the data.

const ID = /^[0-9a-f]{16}$/;
const AXES = ["x", "y", "z"];

export const START = { surface: null, run: null, compare: [], study: null, colour: "time", log: false, slow: 10, showSlow: true,
  clip: null, at: 0, inside: false, lit: true, camera: null };

export function linkOf(view) {
  const parts = new URLSearchParams();
  if (view.surface) parts.set("surface", view.surface);
  if (view.run) parts.set("run", view.run);
  if (view.study) parts.set("study", view.study);
  if (view.compare.length) parts.set("compare", view.compare.join("."));
  if (view.colour !== START.colour) parts.set("colour", view.colour);
  if (view.log) parts.set("scale", "log");
  if (view.slow !== START.slow) parts.set("slow", String(view.slow));
  if (!view.showSlow) parts.set("regions", "off");
  if (view.clip) parts.set("clip", `${view.clip}${Number(view.at.toFixed(3))}`);
  if (view.inside) parts.set("inside", "on");
  if (!view.lit) parts.set("light", "off");
  if (view.camera) parts.set("camera", view.camera.map((value) => Number(value.toPrecision(5))).join("_"));
  return `#${parts}`;
}

/** The view of an address; whatever is not understood is left out. */
export function viewOf(link) {
  const parts = new URLSearchParams(link.replace(/^#/, ""));
  const view = { ...START };
  const id = (text) => (ID.test(text ?? "") ? text : null);
  view.surface = id(parts.get("surface"));
  view.run = id(parts.get("run"));
  view.study = id(parts.get("study"));
  view.compare = (parts.get("compare") ?? "").split(".").filter((text) => ID.test(text)).slice(0, 4);
  if (parts.get("colour") === "exits") view.colour = "exits";
  view.log = parts.get("scale") === "log";
  const slow = Number(parts.get("slow") ?? START.slow);
  if (slow >= 1 && slow <= 50) view.slow = slow;
  view.showSlow = parts.get("regions") !== "off";
  const clip = parts.get("clip") ?? "";
  const at = Number(clip.slice(1));
  if (AXES.includes(clip[0]) && clip.length > 1 && Math.abs(at) <= 1) Object.assign(view, { clip: clip[0], at });
  view.inside = parts.get("inside") === "on";
  view.lit = parts.get("light") !== "off";
  const camera = (parts.get("camera") ?? "").split("_").map(Number);
  if (camera.length === 6 && camera.every(Number.isFinite)) view.camera = camera;
  return view;
}
