// @ts-check
/** Day, dusk and night: every colour of the page but those of levels. No red or orange but for what is wrong. */
import { dimmed, hexOf, rgbOf } from "./colours.js";

/**
 * @typedef {object} Palette
 * @property {string} page behind everything
 * @property {string} plate behind plots and buttons
 * @property {string} text
 * @property {string} faint lines of plots, borders: not for text
 * @property {string} accent what is chosen; focus
 * @property {string} beam line of the beam under the pointer
 * @property {string} mean line of the average over beams, and of the predicted pattern
 * @property {string} cautionPlate behind a caution
 * @property {string} cautionText
 * @property {string} wrongPlate behind what is invalid
 * @property {string} wrongText
 * @property {number} light of level colours, 0..1
 */

export const TIMES = /** @type {const} */ (["day", "dusk", "night"]);
/** @typedef {typeof TIMES[number]} Time */
/** Steps of the dimmer: the light of everything is multiplied. At the last one text is still over 4.5:1. */
export const DIMMER = [1, 0.85, 0.7];

/** @type {Record<Time, Palette>} */
const PALETTES = {
  day: {
    page: "#c9cfd1", plate: "#dfe3e3", text: "#10202b", faint: "#7d8b92", accent: "#0f4c81", beam: "#0b3c66",
    mean: "#5f4b66", cautionPlate: "#f4d800", cautionText: "#1c1a00", wrongPlate: "#a30f1d", wrongText: "#ffffff",
    light: 1,
  },
  dusk: {
    page: "#161d23", plate: "#1e272e", text: "#bac4ca", faint: "#56646d", accent: "#8fbcdf", beam: "#cfe3f2",
    mean: "#b99fc4", cautionPlate: "#b59f00", cautionText: "#0d0c00", wrongPlate: "#8f1320", wrongText: "#f2dcde",
    light: 0.6,
  },
  night: {
    page: "#000000", plate: "#06080a", text: "#959a9c", faint: "#3a4146", accent: "#7a9cb8", beam: "#93a5b3",
    mean: "#94809c", cautionPlate: "#1f1b00", cautionText: "#b8a500", wrongPlate: "#5c0a12", wrongText: "#c9a9ac",
    light: 0.22,
  },
};

/** @param {Time} time @param {number} dim place in DIMMER @returns {Palette} */
export function paletteOf(time, dim) {
  const palette = PALETTES[time];
  const factor = DIMMER[dim];
  if (factor === 1) return palette;
  const made = Object.entries(palette).map(([key, value]) => [
    key, typeof value === "string" ? hexOf(dimmed(rgbOf(value), factor)) : value * factor,
  ]);
  return /** @type {Palette} */ (Object.fromEntries(made));
}
