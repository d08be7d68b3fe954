// @ts-check
/**
 * The limits of the colour scale: by hand, or slowly by themselves. Quick ones would make a picture in which the same
 * colour means another level each second.
 */

/** @typedef {import("./types.js").LiveMap} LiveMap @typedef {import("./types.js").Range} Range */

const TIME_S = 30; // about what a watch needs to see a change as a change
const BAND_DB = 2; // limits move when they are off by more, in whole decibels
const LEAST_DB = 20; // noise alone must not fill the scale
const BELOW_DB = 6; // under the median: noise stays dark
const ABOVE_DB = 3; // over the loudest cells

export class SlowLimits {
  constructor() {
    /** @type {Range | null} */
    this.smooth = null;
    /** @type {Range} */
    this.shown = { low: 40, high: 100 };
    this.lastMs = 0;
  }

  /** Take the next map at once as it is. */
  reset() {
    this.smooth = null;
  }

  /** @param {Range} want what would suit now @param {number} tMs data time @returns {boolean} whether what is shown changed */
  take(want, tMs) {
    const waited = Math.max(0, (tMs - this.lastMs) / 1000);
    this.lastMs = tMs;
    if (this.smooth === null) {
      this.smooth = want;
      return this.show({ low: Math.round(want.low), high: Math.round(want.high) });
    }
    const share = 1 - Math.exp(-Math.min(waited, 1) / TIME_S);
    this.smooth = {
      low: this.smooth.low + share * (want.low - this.smooth.low),
      high: this.smooth.high + share * (want.high - this.smooth.high),
    };
    return this.show({ low: stepped(this.shown.low, this.smooth.low), high: stepped(this.shown.high, this.smooth.high) });
  }

  /** @param {Range} range @returns {boolean} */
  show(range) {
    const changed = range.low !== this.shown.low || range.high !== this.shown.high;
    this.shown = range;
    return changed;
  }
}

/** @param {number} shown @param {number} smooth */
function stepped(shown, smooth) {
  return Math.abs(smooth - shown) > BAND_DB ? Math.round(smooth) : shown;
}

/** Limits that suit one map: about its noise, up to its loudest cells. @param {LiveMap} map @returns {Range} */
export function wanted(map) {
  const count = new Uint32Array(256);
  for (let i = 0; i < map.level.length; i++) count[map.level[i]]++;
  const low = map.floorDb + map.stepDb * quantile(count, map.level.length * 0.5) - BELOW_DB;
  const high = map.floorDb + map.stepDb * quantile(count, map.level.length * 0.9995) + ABOVE_DB;
  return { low, high: Math.max(high, low + LEAST_DB) };
}

/**
 * Limits that suit the record of the last minute. @param {import("./record.js").RecordStore} record @returns {Range}
 */
export function wantedOfRecord(record) {
  const count = new Uint32Array(1024); // half decibels from -200 on
  let all = 0;
  for (let i = Math.max(0, record.rows - 120); i < record.rows; i++) {
    const from = record.placeOf(i) * record.beams;
    for (let beam = 0; beam < record.beams; beam++, all++) {
      count[Math.max(0, Math.min(1023, Math.round((record.levelDb[from + beam] + 200) * 2)))]++;
    }
  }
  const low = quantile(count, all * 0.5) / 2 - 200 - BELOW_DB / 2;
  return { low, high: Math.max(quantile(count, all * 0.999) / 2 - 200 + ABOVE_DB, low + LEAST_DB / 2) };
}

/** @param {Uint32Array} count @param {number} rank @returns {number} byte */
function quantile(count, rank) {
  let sum = 0;
  for (let i = 0; i < count.length; i++) {
    sum += count[i];
    if (sum >= rank) return i;
  }
  return count.length - 1;
}
