// @ts-check
/**
 * The bearing-time record as the page keeps it: an hour of rows as the service made them, and the holes between them.
 * Data time that goes back begins it anew.
 */
import { decode } from "./msgpack.js";
import { cosines } from "./frame.js";

/** @typedef {import("./types.js").Hole} Hole */

/**
 * @typedef {object} HistoryAnswer
 * @property {Float64Array} tMs (rows,) data time
 * @property {Float64Array} cos (beams,)
 * @property {Float32Array} levelDb (rows * beams,)
 * @property {Hole[]} holes
 * @property {string} next
 * @property {number | null} newestAgeS
 * @property {number[][]} rangesHz
 * @property {number[] | null} rangeHz
 */

/** @param {ArrayBuffer} buffer msgpack answer of /api/v1/history @returns {HistoryAnswer} */
export function historyOf(buffer) {
  const found = /** @type {Record<string, any>} */ (decode(new Uint8Array(buffer)));
  return {
    tMs: Float64Array.from(found.t_end, (/** @type {number} */ t) => t / 1e6),
    cos: cosines(found.cone_deg),
    levelDb: Float32Array.from(found.level, (/** @type {number} */ v) => found.floor_db + found.step_db * v),
    holes: found.holes.map((/** @type {any} */ h) => ({ tMs: h.t / 1e6, tEndMs: h.t_end / 1e6, why: h.why })),
    next: found.next, newestAgeS: found.newest_age_s, rangesHz: found.ranges_hz, rangeHz: found.range_hz,
  };
}

export const ROWS = 7300; // an hour at two a second, and a little

export class RecordStore {
  constructor() {
    this.beams = 0;
    this.rows = 0;
    /** rows ever taken: tells a drawing that something is new */
    this.count = 0;
    /** @type {Float64Array} */
    this.cos = new Float64Array(0);
    this.tMs = new Float64Array(ROWS);
    this.levelDb = new Float32Array(0);
    /** @type {Hole[]} */
    this.holes = [];
  }

  clear() {
    this.rows = 0;
    this.holes = [];
  }

  /** @returns {number} data time, ms; NaN without rows */
  get newestMs() {
    return this.rows === 0 ? NaN : this.tMs[(this.count - 1) % ROWS];
  }

  /** Place of row i, 0 the oldest. @param {number} i */
  placeOf(i) {
    return (this.count - this.rows + i) % ROWS;
  }

  /** @param {HistoryAnswer} answer */
  take(answer) {
    const rows = answer.tMs.length;
    if (rows === 0) return;
    if (answer.cos.length !== this.beams || answer.tMs[0] < this.newestMs) {
      this.clear();
      if (answer.cos.length !== this.beams) this.levelDb = new Float32Array(ROWS * answer.cos.length);
      this.beams = answer.cos.length;
      this.cos = answer.cos;
    }
    const last = this.newestMs;
    for (let i = 0; i < rows; i++) {
      const at = this.count % ROWS;
      this.tMs[at] = answer.tMs[i];
      this.levelDb.set(answer.levelDb.subarray(i * this.beams, (i + 1) * this.beams), at * this.beams);
      this.count++;
    }
    this.rows = Math.min(this.rows + rows, ROWS);
    this.holes.push(...answer.holes.filter((hole) => hole.why !== "began"));
    if (last < answer.tMs[0] && answer.holes.some((hole) => hole.why === "began")) {
      this.holes.push({ tMs: last, tEndMs: answer.tMs[0], why: "service restarted" });
    }
    const oldest = this.tMs[this.placeOf(0)];
    this.holes = this.holes.filter((hole) => hole.tEndMs >= oldest).slice(-500);
  }
}
