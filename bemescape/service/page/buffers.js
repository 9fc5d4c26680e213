// Numbers from the service: a JSON header and raw arrays, see bemescape/service/buffers.py.

const KINDS = { float32: Float32Array, uint32: Uint32Array, int32: Int32Array };

/** {header, arrays}: each array is a view into the buffer, with no copy. */
export function unpacked(buffer) {
  const length = new DataView(buffer).getUint32(0, true);
  const header = JSON.parse(new TextDecoder().decode(new Uint8Array(buffer, 4, length)));
  const arrays = {};
  for (const [name, { kind, shape, start }] of Object.entries(header.arrays)) {
    arrays[name] = new KINDS[kind](buffer, 4 + length + start, shape.reduce((a, b) => a * b, 1));
  }
  return { header, arrays };
}

/** Corners (9 numbers a triangle) of faces over vertices, so that each panel can have a colour of its own. */
export function loose(vertices, faces) {
  const corners = new Float32Array(faces.length * 3);
  for (let k = 0; k < faces.length; k += 1) {
    const from = 3 * faces[k];
    corners[3 * k] = vertices[from];
    corners[3 * k + 1] = vertices[from + 1];
    corners[3 * k + 2] = vertices[from + 2];
  }
  return corners;
}

/** One value a panel, repeated for its three corners. */
export function perCorner(values) {
  const repeated = new Float32Array(3 * values.length);
  for (let k = 0; k < values.length; k += 1) repeated.fill(values[k], 3 * k, 3 * k + 3);
  return repeated;
}
