// @ts-check
/** A binary frame of the live socket as a map. */
import { decode } from "./msgpack.js";

/** @typedef {import("./types.js").LiveMap} LiveMap */

/**
 * @param {ArrayBuffer} buffer uint32 L, L bytes of msgpack, levels as bytes
 * @returns {LiveMap}
 */
export function mapOf(buffer) {
  const length = new DataView(buffer).getUint32(0, true);
  const header = /** @type {Record<string, any>} */ (decode(new Uint8Array(buffer, 4, length)));
  const level = new Uint8Array(buffer, 4 + length);
  const [beams, bins] = header.shape;
  if (header.encoding !== "u1" || level.length !== beams * bins) {
    throw new RangeError(`a map of ${beams} x ${bins} came with ${level.length} bytes of ${header.encoding}`);
  }
  return {
    band: header.band, tEndMs: header.t_end / 1e6, beams, bins, cos: cosines(header.cone_deg), f0Hz: header.f0_hz,
    dfHz: header.df_hz, level, floorDb: header.floor_db, stepDb: header.step_db, spanS: header.span_s,
    averages: header.averages, limits: header.limits, latencyMs: header.latency_ms, skipped: header.skipped,
  };
}

/** @param {number[]} coneDeg @returns {Float64Array} */
export function cosines(coneDeg) {
  return Float64Array.from(coneDeg, (angle) => Math.cos((angle * Math.PI) / 180));
}

/** Beam that looks nearest to a cosine. @param {Float64Array} cos falling @param {number} u */
export function beamAt(cos, u) {
  let best = 0;
  for (let i = 1; i < cos.length; i++) {
    if (Math.abs(cos[i] - u) < Math.abs(cos[best] - u)) best = i;
  }
  return best;
}

/** Bin of a frequency, the nearest there is. @param {LiveMap} map @param {number} hz */
export function binAt(map, hz) {
  return Math.max(0, Math.min(map.bins - 1, Math.round((hz - map.f0Hz) / map.dfHz)));
}

/** Level of one cell, dB. @param {LiveMap} map @param {number} beam @param {number} bin */
export function levelAt(map, beam, bin) {
  return map.floorDb + map.stepDb * map.level[beam * map.bins + bin];
}

/**
 * Mean over beams of the power in each bin: the array average against which a beam is shown.
 * @param {LiveMap} map @param {Float32Array} into (bins or more,) dB
 */
export function averageOverBeams(map, into) {
  const power = new Float64Array(256);
  for (let i = 0; i < 256; i++) power[i] = 10 ** ((i * map.stepDb) / 10);
  const sum = new Float64Array(map.bins);
  for (let beam = 0, at = 0; beam < map.beams; beam++) {
    for (let bin = 0; bin < map.bins; bin++, at++) {
      sum[bin] += power[map.level[at]];
    }
  }
  for (let bin = 0; bin < map.bins; bin++) {
    into[bin] = map.floorDb + 10 * Math.log10(sum[bin] / map.beams);
  }
}
