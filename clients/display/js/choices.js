// @ts-check
/** What the operator has chosen for this screen; kept by the browser, checked when it is read back. */
import { COLOUR_MAPS } from "./colourmaps.js";
import { DIMMER, TIMES } from "./palettes.js";

/** @typedef {import("./palettes.js").Time} Time @typedef {import("./colourmaps.js").ColourMap} ColourMap */

export const SPANS_S = [300, 900, 1800, 3600];
/** Viewing distances, m: letters are 1/200 of it high (capitals 0.7 of the type size, a CSS pixel 0.265 mm). */
export const DISTANCES_M = [0.5, 0.6, 0.8];
const KEY = "soundrose.display.1";

/**
 * @typedef {object} Choices
 * @property {Time} time
 * @property {number} dim place in DIMMER
 * @property {ColourMap} colours
 * @property {number} spanS of the record
 * @property {number} distanceM
 * @property {string} band
 * @property {number | null} part of the record's ranges of frequency; null: all
 * @property {boolean} auto limits move slowly by themselves
 * @property {number} low dB
 * @property {number} high dB
 * @property {boolean} keys single keys work
 */

/** @type {Choices} */
const FIRST = { time: "day", dim: 0, colours: "deep", spanS: 900, distanceM: 0.6, band: "", part: null, auto: true,
  low: 40, high: 100, keys: true };

/** @param {Pick<Storage, "getItem">} storage @returns {Choices} */
export function readChoices(storage) {
  /** @type {any} */
  let found = {};
  try {
    found = JSON.parse(storage.getItem(KEY) ?? "{}") ?? {};
  } catch {
    found = {};
  }
  /** @template T @param {readonly T[]} allowed @param {unknown} value @param {T} first @returns {T} */
  const oneOf = (allowed, value, first) => (allowed.includes(/** @type {T} */ (value)) ? /** @type {T} */ (value) : first);
  const levels = Number.isFinite(found.low) && Number.isFinite(found.high) && found.high - found.low >= 5;
  return {
    time: oneOf(TIMES, found.time, FIRST.time),
    dim: oneOf(DIMMER.map((_, i) => i), found.dim, FIRST.dim),
    colours: oneOf(COLOUR_MAPS, found.colours, FIRST.colours),
    spanS: oneOf(SPANS_S, found.spanS, FIRST.spanS),
    distanceM: oneOf(DISTANCES_M, found.distanceM, FIRST.distanceM),
    band: typeof found.band === "string" ? found.band : FIRST.band,
    part: oneOf([null, 0, 1, 2, 3], found.part, null),
    auto: found.auto !== false || !levels,
    low: levels ? found.low : FIRST.low,
    high: levels ? found.high : FIRST.high,
    keys: found.keys !== false,
  };
}

/** @param {Pick<Storage, "setItem">} storage @param {Choices} choices */
export function writeChoices(storage, choices) {
  try {
    storage.setItem(KEY, JSON.stringify(choices));
  } catch {
    // a browser that keeps nothing: the choices hold until it is closed
  }
}

/** The next of a list, round and round. @template T @param {readonly T[]} list @param {T} now @param {number} [by] @returns {T} */
export function next(list, now, by = 1) {
  return list[(list.indexOf(now) + by + list.length) % list.length];
}
