// @ts-check
/** Axes: from values to CSS pixels and back, and where ticks stand. */

/** Half of what the bearing axis shows, in cosine: a little past both endfires, so that their beams are whole. */
export const COS_EDGE = 1.012;
/** Cone angles that are written at the bearing axis. */
const ANGLES = [0, 30, 45, 60, 75, 90, 105, 120, 135, 150, 180];

/** @typedef {import("./types.js").Range} Range @typedef {import("./types.js").Plot} Plot */

/** @param {Range} range @param {number} at @param {number} length @param {number} value */
export function place(range, at, length, value) {
  return at + ((value - range.low) / (range.high - range.low)) * length;
}

/** @param {Range} range @param {number} at @param {number} length @param {number} pixel */
export function valueAt(range, at, length, pixel) {
  return range.low + ((pixel - at) / length) * (range.high - range.low);
}

/** Pixel row of a cosine: forward on top, as the array is drawn with its bow up. @param {Plot} plot @param {number} cos */
export function rowOf(plot, cos) {
  return plot.top + ((COS_EDGE - cos) / (2 * COS_EDGE)) * plot.height;
}

/** @param {Plot} plot @param {number} y @returns {number} cosine, in -1..1 */
export function cosAt(plot, y) {
  return Math.max(-1, Math.min(1, COS_EDGE - ((y - plot.top) / plot.height) * 2 * COS_EDGE));
}

/** Round steps. @param {Range} range @param {number} most number of ticks @returns {number[]} */
export function ticks(range, most) {
  const span = range.high - range.low;
  const rough = span / Math.max(1, most);
  const power = 10 ** Math.floor(Math.log10(rough));
  const step = power * (/** @type {number} */ ([1, 2, 5, 10].find((s) => s * power >= rough * 0.999)));
  const found = [];
  for (let v = Math.ceil(range.low / step - 1e-9) * step; v <= range.high + step * 1e-6; v += step) {
    found.push(Math.abs(v) < step * 1e-9 ? 0 : v);
  }
  return found;
}

/** Cone angles whose labels do not touch. @param {Plot} plot @param {number} size height of a label @returns {number[]} */
export function angleTicks(plot, size) {
  /** @type {number[]} */
  const kept = [];
  for (const angle of [0, 180, 90, ...ANGLES]) {
    const y = rowOf(plot, Math.cos((angle * Math.PI) / 180));
    const free = kept.every((a) => Math.abs(rowOf(plot, Math.cos((a * Math.PI) / 180)) - y) >= size * 1.2);
    if (free) kept.push(angle);
  }
  return kept;
}

/** Times of ticks. @param {number} lowMs @param {number} highMs @param {number} most @returns {number[]} ms */
export function timeTicks(lowMs, highMs, most) {
  const steps = [10, 30, 60, 120, 300, 600, 900].map((s) => s * 1000);
  const step = steps.find((s) => (highMs - lowMs) / s <= most) ?? 1_800_000;
  const found = [];
  for (let t = Math.ceil(lowMs / step) * step; t <= highMs; t += step) found.push(t);
  return found;
}
