// @ts-check
/**
 * Colours of levels: even steps of lightness from low to high, told apart with any colour vision, none of them an
 * alert's. `deep` is our own: a straight line in OKLab from dark blue to pale straw, so that equal steps of level are
 * equal steps to the eye. `viridis` is a published table (CC0). `grey` is lightness alone.
 */
import { dimmed, okLab } from "./colours.js";
import { VIRIDIS } from "./viridis.js";

/** @typedef {import("./colours.js").Rgb} Rgb */

export const COLOUR_MAPS = /** @type {const} */ (["deep", "viridis", "grey"]);
/** @typedef {typeof COLOUR_MAPS[number]} ColourMap */

/** Ends of `deep` in OKLab: L, a, b. */
const DEEP = { low: [0.2, -0.005, -0.075], high: [0.93, -0.012, 0.1] };
/** Over the top of the scale: no colour of any map, and no alert's. */
const OVER = /** @type {Rgb} */ ([236, 190, 255]);

/** @param {ColourMap} name @param {number} t 0..1 @returns {Rgb} */
export function colourOf(name, t) {
  if (name === "viridis") {
    const n = parseInt(VIRIDIS.slice(6 * Math.round(255 * t), 6 * Math.round(255 * t) + 6), 16);
    return [(n >> 16) & 255, (n >> 8) & 255, n & 255];
  }
  if (name === "grey") return okLab(0.2 + 0.75 * t, 0, 0);
  const [L, a, b] = DEEP.low.map((low, i) => low + (DEEP.high[i] - low) * t);
  return okLab(L, a, b);
}

/**
 * The table of a map: 256 colours and the one over the top, as RGBA in memory order.
 * @param {ColourMap} name @param {number} light 0..1: multiplies the light of all, for the night
 * @returns {Uint32Array} (257,)
 */
export function tableOf(name, light) {
  const table = new Uint32Array(257);
  const bytes = new Uint8Array(table.buffer);
  for (let i = 0; i < 257; i++) {
    const rgb = dimmed(i === 256 ? OVER : colourOf(name, i / 255), light);
    bytes.set([...rgb, 255], 4 * i);
  }
  return table;
}

/**
 * Colour of each byte of a map. @param {Uint32Array} table (257,) @param {number} floorDb @param {number} stepDb
 * @param {{low: number, high: number}} limits dB @param {Uint32Array} into (256,)
 */
export function colourBytes(table, floorDb, stepDb, limits, into) {
  for (let i = 0; i < 256; i++) into[i] = table[placeOf(floorDb + i * stepDb, limits)];
}

/** Place of a level in a table. @param {number} level @param {{low: number, high: number}} limits @returns {number} */
export function placeOf(level, limits) {
  const place = Math.round(((level - limits.low) / (limits.high - limits.low)) * 255);
  return level > limits.high ? 256 : Math.max(0, Math.min(255, place));
}
