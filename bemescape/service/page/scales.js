// What a colour means, and numbers as text. The rules are those of the pictures and the report (viz/scales.py).

const NEARLY_EVEN = 0.35;
const CLIPPED_PART = 0.02;
const DECADES = 4;

/** Factor and name of the unit in which a time reads best. */
export function timeUnit(seconds) {
  const size = Math.abs(seconds);
  for (const [factor, name] of [[1, "s"], [1e-3, "ms"], [1e-6, "µs"], [1e-9, "ns"]]) if (size >= factor) return [factor, name];
  return size > 0 ? [1e-9, "ns"] : [1, "s"];
}

const plain = (value, digits) => String(Number(value.toPrecision(digits)));

export function timeText(seconds, digits = 4) {
  const [factor, name] = timeUnit(seconds);
  return `${plain(seconds / factor, digits)} ${name}`;
}

export function lengthText(micrometres, digits = 3) {
  const size = Math.abs(micrometres);
  return size > 0 && size < 1 ? `${plain(micrometres * 1e3, digits)} nm` : `${plain(micrometres, digits)} µm`;
}

export const percentText = (part, digits = 2) => `${plain(100 * part, digits)} %`;

/** Round values between the ends: steps of 1, 2 or 5 times a power of ten. */
export function ticks(low, high, log, wanted = 6) {
  const found = [];
  if (log && high / low > 4) {
    const digits = high / low < 300 ? [1, 2, 5] : [1];
    for (let power = Math.floor(Math.log10(low)); power <= Math.ceil(Math.log10(high)); power += 1) {
      for (const digit of digits) found.push(Number(`${digit}e${power}`));
    }
  } else {
    const step = roundDown(((high - low) / wanted) * 1.5);
    for (let k = Math.ceil(low / step - 1e-9); k <= high / step + 1e-9; k += 1) found.push(Number((k * step).toPrecision(12)));
  }
  return found.filter((tick) => tick >= low * (1 - 1e-9) - 1e-300 && tick <= high * (1 + 1e-9));
}

/** Longest of 1, 2, 5 times a power of ten that is not above the value. */
export function roundDown(value) {
  const power = Math.floor(Math.log10(value));
  for (const digit of [5, 2, 1]) if (Number(`${digit}e${power}`) <= value * (1 + 1e-9)) return Number(`${digit}e${power}`);
  return Number(`5e${power - 1}`);
}

/** Order of the entries that are wanted, by value, and the value below which a part of their area lies. */
function areaQuantile(values, areas, wanted, part) {
  const order = [];
  for (let k = 0; k < values.length; k += 1) if (wanted(k)) order.push(k);
  order.sort((a, b) => values[a] - values[b]);
  let whole = 0;
  for (const k of order) whole += areas[k];
  let sum = 0;
  for (const k of order) {
    sum += areas[k];
    if (sum >= part * whole) return values[k];
  }
  return order.length ? values[order[order.length - 1]] : 0;
}

/** The scale of the time on the wall: {low, high, log, title, factor}. */
export function timeScale({ time_s: times, window, area_um2: areas }, log) {
  let high = 1e-300;
  let fastest = Infinity;
  for (let k = 0; k < times.length; k += 1) {
    if (window[k] >= 0) continue;
    high = Math.max(high, times[k]);
    if (times[k] > 0) fastest = Math.min(fastest, times[k]);
  }
  const wall = (k) => window[k] < 0;
  let low = log ? Math.max(fastest, high * 10 ** -DECADES) : areaQuantile(times, areas, wall, CLIPPED_PART);
  if (!log && low < NEARLY_EVEN * high) low = 0;
  if (low >= 0.999 * high) low = (log ? 0.5 : 0.9) * high;
  const [factor, unit] = timeUnit(high);
  return { low, high, log, factor, title: `mean escape time (${unit})` };
}

/** The logarithmic scale of the exit density on windows. */
export function densityScale({ exit_density_per_um2: values, window, area_um2: areas }) {
  const inside = (k) => window[k] >= 0 && values[k] > 0;
  const high = areaQuantile(values, areas, inside, 0.995) || 1;
  let low = areaQuantile(values, areas, inside, 0.005) || 0.1;
  low = Math.max(Math.min(low, 0.5 * high), high * 10 ** -DECADES);
  return { low, high, log: true, factor: 1, title: "exits per µm² (part of all)" };
}

/** Place of a value on the scale, 0 to 1. */
export function position({ low, high, log }, value) {
  const inside = Math.min(Math.max(value, low), high);
  return log ? Math.log(inside / low) / Math.log(high / low) : (inside - low) / (high - low);
}

/** The level above which the slowest part of the wall's area lies. */
export function slowLevel({ time_s: times, window, area_um2: areas }, part) {
  return areaQuantile(times, areas, (k) => window[k] < 0, 1 - part);
}

export function tickText(value) {
  if (value === 0 || (Math.abs(value) >= 1e-3 && Math.abs(value) < 1e4)) return plain(value, 6);
  return value.toExponential(0).replace("e", "·10^").replace("+", "");
}
