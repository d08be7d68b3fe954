// @ts-check
/** What is under the pointer, in words and numbers. */
import { angleDeg, widthDeg, widthInCosine } from "./beams.js";
import { averageOverBeams, beamAt, binAt, levelAt } from "./frame.js";
import { bearing, frequency, level, relative } from "./wording.js";

/** @typedef {import("./scene.js").Scene} Scene */

/** @param {Scene} scene @returns {[string, string][]} */
export function pointerPairs(scene) {
  const { cursor, map } = scene;
  if (cursor === null || map === null) return [["Pointer", "move it over a plot, or use the arrow keys"]];
  const beam = beamAt(map.cos, cursor.cos);
  const bin = binAt(map, cursor.hz);
  const mean = new Float32Array(map.bins);
  averageOverBeams(map, mean);
  const here = levelAt(map, beam, bin);
  const valid = scene.freshness === "fresh" || scene.freshness === "stale";
  const width = scene.line === null ? null : widthDeg(scene.line, cursor.hz, cursor.cos);
  return [
    ["Frequency", frequency(cursor.hz)],
    ["Cone angle", `${bearing(angleDeg(cursor.cos))} from forward`],
    ["Relative", relative(cursor.cos)],
    ["True", "-- no heading"],
    ["Beamwidth", widthText(scene, cursor, width)],
    ["Level", valid ? `${level(here)} re 1 µPa²/Hz` : "--.- dB (stale)"],
    ["Over mean", valid ? `${(here - mean[bin]).toFixed(1)} dB` : "--.- dB (stale)"],
    ["Images", imagesText(scene, cursor.cos)],
  ];
}

/** Wider than 0.8 in cosine a beam hears, but has no bearing. @param {Scene} scene
 * @param {import("./types.js").Cursor} cursor @param {number | null} width degrees */
function widthText(scene, cursor, width) {
  if (scene.line === null) return "-- no hydrophone";
  const none = widthInCosine(scene.line, cursor.hz) > 0.8;
  return width === null ? "heard, no bearing" : `${width.toFixed(1)}°${none ? ": heard, no bearing" : " at half power"}`;
}

/** @param {Scene} scene @param {number} cos */
function imagesText(scene, cos) {
  const spacing = scene.band?.spacing_m ?? null;
  if (spacing === null || scene.array === null) return "uneven spacing";
  return `from ${frequency(scene.array.sound_speed_m_s / (spacing * (1 + Math.abs(cos))))} up`;
}

/**
 * The cell in view that is most over the mean over beams: low frequencies are loud everywhere, and that is no news.
 * @param {import("./types.js").LiveMap} map @param {import("./types.js").Range} range
 */
export function outstanding(map, range) {
  const mean = new Float32Array(map.bins);
  averageOverBeams(map, mean);
  let [best, most] = [-1, -Infinity];
  for (let bin = 0; bin < map.bins; bin++) {
    const hz = map.f0Hz + bin * map.dfHz;
    if (hz < range.low || hz > range.high) continue;
    for (let beam = 0; beam < map.beams; beam++) {
      const over = levelAt(map, beam, bin) - mean[bin];
      if (over > most) [best, most] = [beam * map.bins + bin, over];
    }
  }
  if (best < 0) return null;
  return { cos: map.cos[Math.floor(best / map.bins)], hz: map.f0Hz + (best % map.bins) * map.dfHz };
}

/**
 * The next beam that stands out of its neighbours at a frequency, going aft, round and round.
 * @param {import("./types.js").LiveMap} map @param {number} hz @param {number} cos where to go on from
 * @returns {number | null} cosine
 */
export function nextSummit(map, hz, cos) {
  const bin = binAt(map, hz);
  const levels = Float32Array.from({ length: map.beams }, (_, beam) => levelAt(map, beam, bin));
  const sorted = Float32Array.from(levels).sort();
  const least = sorted[Math.floor(map.beams / 2)] + 3;
  const tops = [];
  for (let beam = 0; beam < map.beams; beam++) {
    const [before, after] = [levels[beam - 1] ?? -Infinity, levels[beam + 1] ?? -Infinity];
    if (levels[beam] >= least && levels[beam] > before && levels[beam] >= after) tops.push(map.cos[beam]);
  }
  return tops.find((u) => u < cos - 1e-9) ?? tops[0] ?? null;
}
