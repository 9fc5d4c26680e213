// The 3D view: one canvas, one to four panes with a camera in common, drawn only when something changed.
import * as T from "./vendor/three_bundle.js";
import { bytes, cividis, magma } from "./maps.js";
import { loose, perCorner } from "./buffers.js";

const MAPS = { time: bytes(cividis), exits: bytes(magma) };
const AXIS = { x: new T.Vector3(1, 0, 0), y: new T.Vector3(0, 1, 0), z: new T.Vector3(0, 0, 1) };
/** A pick is a press and release closer than this. */
const PICK_PX = 4;
/** Beside several panes, the colour bar has this width for itself. */
const BAR_PX = 140;

const VERTEX = `
attribute float value; attribute float isWindow;
varying vec3 vPlace; varying vec3 vView; varying float vValue; varying float vWindow;
void main() {
  vPlace = position; vValue = value; vWindow = isWindow;
  vec4 view = modelViewMatrix * vec4(position, 1.0);
  vView = view.xyz; gl_Position = projectionMatrix * view;
}`;
const FRAGMENT = `
precision highp float;
uniform sampler2D map; uniform float low, high, level, patchRadius; uniform vec3 patchCentre; uniform vec4 clip;
uniform bool logarithmic, coloured, exits, lit, regions, clipped;
varying vec3 vPlace; varying vec3 vView; varying float vValue; varying float vWindow;
void main() {
  if (clipped && dot(clip.xyz, vPlace) > clip.w) discard;
  vec3 colour = vec3(0.80, 0.83, 0.86);
  if (coloured) {
    if ((vWindow > 0.5) != exits) colour = exits ? vec3(0.86, 0.88, 0.90) : vec3(0.208, 0.816, 1.0);
    else {
      float inside = clamp(vValue, low, high);
      float t = logarithmic ? log(inside / low) / log(high / low) : (inside - low) / (high - low);
      colour = texture2D(map, vec2((t * 255.0 + 0.5) / 256.0, 0.5)).rgb;
    }
    if (regions && !exits && vWindow < 0.5 && vValue >= level && mod(gl_FragCoord.x + gl_FragCoord.y, 9.0) < 2.2)
      colour = vec3(0.70, 0.0, 0.106);
  }
  if (patchRadius > 0.0 && distance(vPlace, patchCentre) < patchRadius) colour = mix(colour, vec3(0.208, 0.816, 1.0), 0.75);
  if (lit) colour *= 0.55 + 0.45 * abs(normalize(cross(dFdx(vView), dFdy(vView))).z);
  if (!gl_FrontFacing) colour = mix(colour, vec3(0.55), 0.45);
  gl_FragColor = vec4(colour, 1.0);
}`;
const SECTION_FRAGMENT = `
uniform sampler2D map; varying vec2 vUv;
void main() { vec4 c = texture2D(map, vUv); if (c.a < 0.5) discard; gl_FragColor = vec4(c.rgb / c.a, 1.0); }`;
const SECTION_VERTEX = `varying vec2 vUv; void main() { vUv = uv; gl_Position = projectionMatrix * modelViewMatrix * vec4(position, 1.0); }`;

function mapTexture(table) {
  const data = new Uint8Array(256 * 4);
  for (let k = 0; k < 256; k += 1) data.set([table[3 * k], table[3 * k + 1], table[3 * k + 2], 255], 4 * k);
  const texture = new T.DataTexture(data, 256, 1, T.RGBAFormat, T.UnsignedByteType);
  texture.needsUpdate = true;
  return texture;
}
const TEXTURES = { time: mapTexture(MAPS.time), exits: mapTexture(MAPS.exits) };

const PLAIN_VERTEX = `varying vec3 vPlace; void main() { vPlace = position; gl_Position = projectionMatrix * modelViewMatrix * vec4(position, 1.0); }`;
const PLAIN_FRAGMENT = `
uniform vec3 colour; uniform vec4 clip; uniform bool clipped; varying vec3 vPlace;
void main() { if (clipped && dot(clip.xyz, vPlace) > clip.w) discard; gl_FragColor = vec4(colour, 1.0); }`;
const INK = new T.Vector3(0.063, 0.078, 0.094);
const WINDOW = new T.Vector3(0.208, 0.816, 1.0);

/** One colour without shading, cut where the wall of the pane is cut. */
function plain(pane, colour) {
  const { clip, clipped } = pane.material.uniforms;
  return new T.ShaderMaterial({ vertexShader: PLAIN_VERTEX, fragmentShader: PLAIN_FRAGMENT, side: T.DoubleSide, uniforms: { colour: { value: colour }, clip, clipped } });
}

function lines(places, pane) {
  const geometry = new T.BufferGeometry();
  geometry.setAttribute("position", new T.BufferAttribute(places, 3));
  return new T.LineSegments(geometry, plain(pane, INK));
}

/** One shape: wall, windows, marks, and the search tree for picks. Places are µm from `offset`. */
class Pane {
  constructor(offset) {
    this.scene = new T.Scene();
    this.offset = offset;
    this.groups = {};
    for (const name of ["windows", "marks", "section"]) {
      this.groups[name] = new T.Group();
      this.scene.add(this.groups[name]);
    }
  }

  setWall(corners, values, isWindow) {
    this.geometry = new T.BufferGeometry();
    const count = corners.length / 3;
    this.geometry.setAttribute("position", new T.BufferAttribute(corners, 3));
    this.geometry.setAttribute("value", new T.BufferAttribute(values ?? new Float32Array(count), 1));
    this.geometry.setAttribute("isWindow", new T.BufferAttribute(isWindow ?? new Float32Array(count), 1));
    this.material = new T.ShaderMaterial({
      vertexShader: VERTEX, fragmentShader: FRAGMENT, side: T.DoubleSide, polygonOffset: true, polygonOffsetFactor: 1, polygonOffsetUnits: 1,
      uniforms: { map: { value: TEXTURES.time }, low: { value: 0 }, high: { value: 1 }, level: { value: 0 }, logarithmic: { value: false },
        coloured: { value: false }, exits: { value: false }, lit: { value: true }, regions: { value: false }, clipped: { value: false },
        clip: { value: new T.Vector4() }, patchCentre: { value: new T.Vector3() }, patchRadius: { value: 0 } },
    });
    this.wall = new T.Mesh(this.geometry, this.material);
    this.scene.add(this.wall);
    this.geometry.computeBoundingSphere();
    this.geometry.computeBoundingBox();
  }

  /** Made at the first pick: the picture does not wait for it. `indirect` keeps the numbers of the triangles. */
  get tree() {
    this.known ??= new T.MeshBVH(this.geometry, { indirect: true });
    return this.known;
  }

  clear(name) {
    for (const child of [...this.groups[name].children]) {
      child.geometry.dispose();
      child.material.dispose();
      this.groups[name].remove(child);
    }
  }

  dispose() {
    for (const name of Object.keys(this.groups)) this.clear(name);
    this.geometry?.dispose();
    this.material?.dispose();
  }

  /** From µm of the file's frame to places in the scene, and back. */
  toScene([x, y, z]) { return new T.Vector3(x - this.offset[0], y - this.offset[1], z - this.offset[2]); }
  toFrame(place) { return [place.x + this.offset[0], place.y + this.offset[1], place.z + this.offset[2]]; }
}

export class Stage {
  /** `onPick(place, triangle, pane)`, `onHover(place, triangle, pane)` with null off the wall, `onTurn()` when the camera rests. */
  constructor(canvas, { onPick, onHover, onTurn, onDraw }) {
    this.canvas = canvas;
    Object.assign(this, { onPick, onHover, onTurn, onDraw });
    this.renderer = new T.WebGLRenderer({ canvas, antialias: true, preserveDrawingBuffer: true });
    this.renderer.setPixelRatio(Math.min(window.devicePixelRatio, 2));
    this.renderer.setClearColor(0xffffff, 1);
    this.renderer.autoClear = false;
    this.camera = new T.PerspectiveCamera(30, 1, 0.001, 1000);
    this.panes = [];
    this.drawn = 0;
    /** Height of the controls that stand on the lower edge of the canvas. */
    this.below = 56;
    this.controls = new T.OrbitControls(this.camera, canvas);
    this.controls.addEventListener("change", () => this.redraw());
    this.controls.addEventListener("end", () => {
      if (this.cut) this.setClip(this.cut.axis, this.cut.at);
      onTurn();
    });
    new ResizeObserver(() => this.resized()).observe(canvas.parentElement);
    canvas.addEventListener("pointerdown", (event) => { this.pressed = [event.clientX, event.clientY]; });
    canvas.addEventListener("pointerup", (event) => this.released(event));
    canvas.addEventListener("pointermove", (event) => this.hovered(event));
    canvas.addEventListener("pointerleave", () => onHover(null));
    canvas.addEventListener("keydown", (event) => this.keyed(event));
    this.resized();
  }

  /** The shapes themselves are shown; only pictures have to be asked for, see `FlatStage`. */
  about() {}

  // -- what is shown ---------------------------------------------------------------------------------------------------

  reset(count = 1) {
    for (const pane of this.panes) pane.dispose();
    this.panes = [];
    this.count = count;
    this.redraw();
  }

  showSurface({ header, arrays }) {
    this.reset();
    const pane = new Pane(header.offset_um);
    pane.setWall(loose(arrays.vertices, arrays.faces));
    this.panes.push(pane);
    this.redraw();
    return pane;
  }

  addResult({ header, arrays }) {
    const pane = new Pane(header.offset_um);
    pane.arrays = arrays;
    pane.header = header;
    pane.isWindow = Float32Array.from(arrays.window, (number) => (number >= 0 ? 1 : 0));
    pane.setWall(loose(arrays.vertices, arrays.faces), perCorner(arrays.time_s), perCorner(pane.isWindow));
    const rim = new Float32Array(arrays.rim.length * 3);
    arrays.rim.forEach((vertex, k) => rim.set(arrays.vertices.subarray(3 * vertex, 3 * vertex + 3), 3 * k));
    pane.groups.windows.add(lines(rim, pane));
    this.panes.push(pane);
    this.redraw();
    return pane;
  }

  /** Colours of a result: scale, what is coloured, slow level. */
  colour(pane, { scale, exits, level, regions }) {
    const { uniforms } = pane.material;
    uniforms.coloured.value = true;
    uniforms.exits.value = exits;
    uniforms.map.value = exits ? TEXTURES.exits : TEXTURES.time;
    uniforms.low.value = scale.low;
    uniforms.high.value = scale.high;
    uniforms.logarithmic.value = scale.log;
    uniforms.level.value = level;
    uniforms.regions.value = regions;
    pane.geometry.getAttribute("value").copyArray(perCorner(exits ? pane.arrays.exit_density_per_um2 : pane.arrays.time_s)).needsUpdate = true;
    this.redraw();
  }

  setLight(lit) { this.each((uniforms) => { uniforms.lit.value = lit; }); }
  setLevel(level) { this.each((uniforms) => { uniforms.level.value = level; }); }

  /** Take away what lies on the camera's side of a plane across an axis; `at` from −1 to 1 over the shape. */
  setClip(axis, at) {
    this.cut = axis === null ? null : { axis, at };
    for (const pane of this.panes) {
      const { uniforms } = pane.material;
      uniforms.clipped.value = axis !== null;
      if (axis === null) continue;
      const box = pane.geometry.boundingBox;
      const middle = 0.5 * (box.max[axis] + box.min[axis]);
      const half = 0.5 * (box.max[axis] - box.min[axis]);
      const place = middle + at * half;
      const side = this.camera.position[axis] >= place ? 1 : -1;
      uniforms.clip.value.set(side * AXIS[axis].x, side * AXIS[axis].y, side * AXIS[axis].z, side * place);
    }
    this.redraw();
  }

  clipPlane(pane, axis) {
    const { value } = pane.material.uniforms.clip;
    const place = AXIS[axis].clone().multiplyScalar(value.w * Math.sign(value[axis]));
    return { point: pane.toFrame(place), normal: AXIS[axis].toArray() };
  }

  /** The patch under the pointer, before the service has answered with the true one. */
  setPatch(place, radius) {
    this.each((uniforms) => {
      uniforms.patchRadius.value = place ? radius : 0;
      if (place) uniforms.patchCentre.value.copy(place);
    });
  }

  /** The true parts of the wall that windows take. */
  showWindows(pane, { header, arrays }) {
    pane.clear("windows");
    pane.windows = header.windows;
    const shift = header.offset_um.map((value, k) => value - pane.offset[k]);
    const corners = arrays.corners.map((value, k) => value + shift[k % 3]);
    const geometry = new T.BufferGeometry();
    geometry.setAttribute("position", new T.BufferAttribute(corners, 3));
    pane.groups.windows.add(new T.Mesh(geometry, plain(pane, WINDOW)));
    pane.groups.windows.add(lines(borders(corners), pane));
    this.redraw();
  }

  hideWindows(pane) { pane.clear("windows"); pane.windows = []; this.redraw(); }

  /** Balls at places in µm: damage, starts. What lies behind the wall shines through it faintly. */
  mark(pane, places, colour, radius) {
    for (const place of places) {
      for (const behind of [true, false]) {
        const ball = new T.Mesh(new T.SphereGeometry(radius, 16, 12),
          new T.MeshBasicMaterial({ color: colour, depthTest: !behind, transparent: true, opacity: behind ? 0.3 : 1 }));
        ball.position.copy(pane.toScene(place));
        ball.renderOrder = behind ? 1 : 2;
        pane.groups.marks.add(ball);
      }
    }
    this.redraw();
  }

  clearMarks(pane) { pane.clear("marks"); this.redraw(); }

  showSection(pane, { header, arrays }, scale, position) {
    pane.clear("section");
    const side = [header.along_um, header.up_um].map((v) => new T.Vector3(...v));
    const [columns, rows] = side.map((v) => Math.round(v.length() / header.step_um));
    const pixels = new Uint8Array(4 * columns * rows);
    arrays.time_s.forEach((time, k) => {
      if (Number.isNaN(time)) return;
      const t = Math.round(255 * position(scale, time));
      pixels.set([MAPS.time[3 * t], MAPS.time[3 * t + 1], MAPS.time[3 * t + 2], 255], 4 * k);
    });
    const texture = new T.DataTexture(pixels, columns, rows, T.RGBAFormat, T.UnsignedByteType);
    // Between samples, so that the border of the cut is smooth: outside, colour and opacity are 0.
    texture.magFilter = T.LinearFilter;
    texture.needsUpdate = true;
    const corner = pane.toScene(header.corner_um);
    const geometry = new T.BufferGeometry();
    const places = [corner, corner.clone().add(side[0]), corner.clone().add(side[0]).add(side[1]), corner.clone().add(side[1])];
    geometry.setAttribute("position", new T.BufferAttribute(Float32Array.from(places.flatMap((p) => p.toArray())), 3));
    geometry.setAttribute("uv", new T.BufferAttribute(Float32Array.from([0, 0, 1, 0, 1, 1, 0, 1]), 2));
    geometry.setIndex([0, 1, 2, 0, 2, 3]);
    pane.groups.section.add(new T.Mesh(geometry, new T.ShaderMaterial({ vertexShader: SECTION_VERTEX, fragmentShader: SECTION_FRAGMENT, side: T.DoubleSide, uniforms: { map: { value: texture } } })));
    this.redraw();
  }

  hideSection(pane) { pane.clear("section"); this.redraw(); }

  each(change) {
    for (const pane of this.panes) if (pane.material) change(pane.material.uniforms);
    this.redraw();
  }

  // -- camera ----------------------------------------------------------------------------------------------------------

  get reach() { return Math.max(...this.panes.map((pane) => pane.geometry.boundingSphere.radius), 1e-6); }

  fit() {
    const reach = this.reach;
    const [, , w, hh] = this.areas[0];
    this.camera.aspect = w / hh;
    this.controls.target.set(0, 0, 0);
    this.camera.position.copy(new T.Vector3(0.55, -0.75, 0.45).normalize().multiplyScalar(reach * this.distance));
    this.camera.up.set(0, 0, 1);
    this.bound();
  }

  /** Far enough for the whole shape in the narrower direction. */
  get distance() { return 1.08 / Math.sin(Math.atan(Math.tan((15 * Math.PI) / 180) * Math.min(1, this.camera.aspect))); }

  bound() {
    if (this.cut) this.setClip(this.cut.axis, this.cut.at);
    this.controls.minDistance = 0.02 * this.reach;
    this.controls.maxDistance = 30 * this.reach;
    this.controls.update();
    this.redraw();
  }

  get view() { return [...this.camera.position.toArray(), ...this.controls.target.toArray()]; }
  set view(numbers) {
    this.camera.up.set(0, 0, 1);
    this.camera.position.fromArray(numbers.slice(0, 3));
    this.controls.target.fromArray(numbers.slice(3));
    this.bound();
  }

  /** Look at a place of the wall from outside. */
  fly(pane, place) {
    const target = pane.toScene(place);
    const outwards = target.clone().normalize();
    if (outwards.lengthSq() < 0.5) outwards.set(0.5, -0.8, 0.4).normalize();
    if (Math.abs(outwards.z) > 0.95) outwards.add(new T.Vector3(0.25, -0.25, 0)).normalize();
    this.controls.target.copy(target);
    this.camera.position.copy(target).addScaledVector(outwards, 3 * this.reach);
    this.bound();
    this.onTurn();
  }

  keyed(event) {
    const turn = { ArrowLeft: [-1, 0], ArrowRight: [1, 0], ArrowUp: [0, -1], ArrowDown: [0, 1] }[event.key];
    const zoom = { "+": 0.9, "=": 0.9, "-": 1 / 0.9 }[event.key];
    if (!turn && !zoom && event.key !== "0") return;
    event.preventDefault();
    if (event.key === "0") { this.fit(); this.onTurn(); return; }
    const arm = this.camera.position.clone().sub(this.controls.target);
    if (zoom) arm.multiplyScalar(zoom);
    else {
      arm.applyAxisAngle(AXIS.z, turn[0] * 0.12);
      const side = new T.Vector3().crossVectors(AXIS.z, arm).normalize();
      const tilted = arm.clone().applyAxisAngle(side, turn[1] * 0.12);
      if (Math.abs(tilted.clone().normalize().z) < 0.99) arm.copy(tilted);
    }
    this.camera.position.copy(this.controls.target).add(arm);
    this.bound();
    this.onTurn();
  }

  // -- pointer ---------------------------------------------------------------------------------------------------------

  /** Panes as parts of the canvas: [left, top, width, height] in CSS pixels. */
  get areas() {
    const { clientWidth: w, clientHeight: h } = this.canvas;
    const count = Math.max(this.panes.length, this.count ?? 1);
    const free = h - this.below;
    if (count <= 1) return [[0, 0, w, free]];
    const [rows, wide] = [count > 2 ? 2 : 1, w - BAR_PX];
    return Array.from({ length: count }, (_, k) => [(k % 2) * (wide / 2), Math.floor(k / 2) * (free / rows), wide / 2, free / rows]);
  }

  hit(clientX, clientY) {
    const frame = this.canvas.getBoundingClientRect();
    const [x, y] = [clientX - frame.left, clientY - frame.top];
    const number = this.areas.findIndex(([l, t, w, h]) => x >= l && x < l + w && y >= t && y < t + h);
    const pane = this.panes[number];
    if (!pane?.geometry) return null;
    const [l, t, w, h] = this.areas[number];
    this.camera.aspect = w / h;
    this.camera.updateProjectionMatrix();
    const caster = new T.Raycaster();
    caster.setFromCamera(new T.Vector2(((x - l) / w) * 2 - 1, 1 - ((y - t) / h) * 2), this.camera);
    const { clipped, clip } = pane.material.uniforms;
    const c = clip.value;
    const kept = ({ point: p }) => !clipped.value || c.x * p.x + c.y * p.y + c.z * p.z <= c.w;
    const hits = clipped.value ? pane.tree.raycast(caster.ray, T.DoubleSide) : [pane.tree.raycastFirst(caster.ray, T.DoubleSide)];
    const first = hits.filter((found) => found && kept(found)).sort((a, b) => a.distance - b.distance)[0];
    return first ? { place: first.point, triangle: first.faceIndex, pane } : null;
  }

  released(event) {
    const [x, y] = this.pressed ?? [NaN, NaN];
    this.pressed = null;
    if (!(Math.hypot(event.clientX - x, event.clientY - y) < PICK_PX)) return;
    const found = this.hit(event.clientX, event.clientY);
    if (found) this.onPick(found.place, found.triangle, found.pane);
  }

  hovered(event) {
    if (event.buttons) return;
    const at = [event.clientX, event.clientY];
    if (this.waiting) { this.waiting = at; return; }
    this.waiting = at;
    requestAnimationFrame(() => {
      const found = this.hit(...this.waiting);
      this.waiting = null;
      this.onHover(found?.place ?? null, found?.triangle, found?.pane);
    });
  }

  /** Where a place of the frame (µm) is on the screen, for tests and labels. */
  onScreen(place, number = 0) {
    const [l, t, w, h] = this.areas[number];
    this.camera.aspect = w / h;
    this.camera.updateProjectionMatrix();
    this.camera.updateMatrixWorld();
    const p = this.panes[number].toScene(place).project(this.camera);
    const frame = this.canvas.getBoundingClientRect();
    return [frame.left + l + ((p.x + 1) / 2) * w, frame.top + t + ((1 - p.y) / 2) * h];
  }

  /** µm of one CSS pixel at the middle of the view. */
  get pixel() {
    const [, , , h] = this.areas[0];
    return (2 * this.camera.position.distanceTo(this.controls.target) * Math.tan((15 * Math.PI) / 180)) / h;
  }

  // -- drawing -----------------------------------------------------------------------------------------------------------

  resized() {
    const { clientWidth: w, clientHeight: h } = this.canvas.parentElement;
    this.renderer.setSize(w, h, false);
    this.redraw();
  }

  redraw() {
    if (this.asked) return;
    this.asked = true;
    requestAnimationFrame(() => { this.asked = false; this.draw(); });
  }

  draw() {
    const height = this.canvas.clientHeight;
    const away = this.camera.position.distanceTo(this.controls.target);
    this.camera.near = Math.max(away - 6 * this.reach, 0.002 * away);
    this.camera.far = away + 6 * this.reach;
    this.renderer.setScissorTest(false);
    this.renderer.clear();
    this.renderer.setScissorTest(true);
    this.areas.forEach(([l, t, w, h], k) => {
      const pane = this.panes[k];
      if (!pane) return;
      this.camera.aspect = w / h;
      this.camera.updateProjectionMatrix();
      this.renderer.setViewport(l, height - t - h, w, h);
      this.renderer.setScissor(l, height - t - h, w, h);
      this.renderer.render(pane.scene, this.camera);
    });
    this.drawn += 1;
    // When the first shape was on the screen, in ms since the page was asked for.
    if (this.panes.length) this.firstPicture ??= performance.now();
    this.onDraw?.();
  }

  picture() {
    this.draw();
    return new Promise((resolve) => { this.canvas.toBlob(resolve, "image/png"); });
  }
}

/** Edges that one triangle has alone: the border of a patch of loose triangles. */
function borders(corners) {
  const edges = new Map();
  const key = (k) => `${corners[k].toFixed(6)},${corners[k + 1].toFixed(6)},${corners[k + 2].toFixed(6)}`;
  for (let t = 0; t < corners.length; t += 9) {
    for (let k = 0; k < 3; k += 1) {
      const [a, b] = [t + 3 * k, t + 3 * ((k + 1) % 3)];
      const [p, q] = [key(a), key(b)];
      const name = p < q ? `${p}|${q}` : `${q}|${p}`;
      if (edges.has(name)) edges.set(name, null);
      else edges.set(name, [a, b]);
    }
  }
  const found = [...edges.values()].filter(Boolean);
  const places = new Float32Array(6 * found.length);
  found.forEach(([a, b], k) => { places.set(corners.subarray(a, a + 3), 6 * k); places.set(corners.subarray(b, b + 3), 6 * k + 3); });
  return places;
}
