// Pure parts of the page; run by `node --test`.
import assert from "node:assert/strict";
import test from "node:test";
import { loose, perCorner, unpacked } from "../../../bemescape/service/page/buffers.js";
import { linkOf, START, viewOf } from "../../../bemescape/service/page/link.js";
import { bytes, cividis, magma } from "../../../bemescape/service/page/maps.js";
import { densityScale, lengthText, position, roundDown, slowLevel, tickText, ticks, timeScale, timeText } from "../../../bemescape/service/page/scales.js";

test("times and lengths read in the unit that suits them", () => {
  assert.equal(timeText(0.01234567), "12.35 ms");
  assert.equal(timeText(0), "0 s");
  assert.equal(timeText(3.2e-7), "320 ns");
  assert.equal(lengthText(0.06), "60 nm");
  assert.equal(lengthText(12.34), "12.3 µm");
});

test("ticks are round and within the ends", () => {
  assert.deepEqual(ticks(0, 12.3, false), [0, 2, 4, 6, 8, 10, 12]);
  assert.deepEqual(ticks(0.02, 3, true), [0.02, 0.05, 0.1, 0.2, 0.5, 1, 2]);
  assert.equal(roundDown(0.7), 0.5);
  assert.equal(tickText(0.05), "0.05");
});

const arrays = {
  time_s: Float32Array.from([0, 1, 2, 3, 4]),
  window: Int32Array.from([0, -1, -1, -1, -1]),
  area_um2: Float32Array.from([9, 1, 1, 1, 1]),
  exit_density_per_um2: Float32Array.from([2, 0, 0, 0, 0]),
};

test("the scale of time leaves windows out and starts at 0", () => {
  const scale = timeScale(arrays, false);
  assert.deepEqual([scale.low, scale.high, scale.title], [0, 4, "mean escape time (s)"]);
  assert.equal(timeScale(arrays, true).low, 1);
  assert.equal(position(scale, 1), 0.25);
  assert.equal(position({ low: 1, high: 100, log: true }, 10), 0.5);
  assert.equal(position(scale, 99), 1);
});

test("a nearly even wall does not start at 0", () => {
  const even = { ...arrays, time_s: Float32Array.from([0, 3.8, 3.9, 3.95, 4]) };
  assert.ok(timeScale(even, false).low > 3);
});

test("the slow level leaves the wanted part of the wall above it", () => {
  assert.equal(slowLevel(arrays, 0.25), 3);
  assert.equal(slowLevel(arrays, 0.5), 2);
});

test("the density scale is made of windows only", () => {
  assert.equal(densityScale(arrays).high, 2);
});

test("a view survives its link, and nonsense does not", () => {
  const view = { ...START, surface: "0123456789abcdef", run: "fedcba9876543210", log: true, slow: 25, clip: "y", at: -0.32, inside: true, lit: false, camera: [1, 2, 3, 0, 0, 0] };
  assert.deepEqual(viewOf(linkOf(view)), view);
  assert.deepEqual(viewOf("#run=../../x&slow=900&clip=w3&camera=1_2&compare=a.b"), { ...START });
  assert.deepEqual(viewOf("#run=<script>"), { ...START });
});

test("buffers are unpacked without a copy and spread to corners", () => {
  const header = JSON.stringify({ a: 1, arrays: { v: { kind: "float32", shape: [3, 3], start: 0 }, f: { kind: "uint32", shape: [1, 3], start: 36 } } });
  const text = new TextEncoder().encode(header + " ".repeat((4 - (header.length % 4)) % 4));
  const buffer = new ArrayBuffer(4 + text.length + 48);
  new DataView(buffer).setUint32(0, text.length, true);
  new Uint8Array(buffer).set(text, 4);
  new Float32Array(buffer, 4 + text.length, 9).set([0, 0, 0, 1, 0, 0, 0, 1, 0]);
  new Uint32Array(buffer, 4 + text.length + 36, 3).set([2, 1, 0]);
  const found = unpacked(buffer);
  assert.equal(found.header.a, 1);
  assert.equal(found.arrays.v.buffer, buffer);
  assert.deepEqual([...loose(found.arrays.v, found.arrays.f)], [0, 1, 0, 1, 0, 0, 0, 0, 0]);
  assert.deepEqual([...perCorner([5, 6])], [5, 5, 5, 6, 6, 6]);
});

test("the colour maps have 256 steps", () => {
  assert.equal(bytes(cividis).length, 768);
  assert.equal(bytes(magma).length, 768);
});
