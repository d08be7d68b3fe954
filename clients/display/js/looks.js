// @ts-check
/** Palette, sizes of letters and colours of levels that belong to what is chosen. */
import { tableOf } from "./colourmaps.js";
import { paletteOf } from "./palettes.js";

/** @typedef {import("./choices.js").Choices} Choices */

/** @param {Choices} choices */
export function looksOf(choices) {
  const palette = paletteOf(choices.time, choices.dim);
  const sizes = sizesFor(choices.distanceM);
  return { look: { palette, ...sizes }, palette, sizes, table: tableOf(choices.colours, palette.light),
    tableName: `${choices.colours} ${palette.light}` };
}

/** Sizes of letters, CSS pixels. @param {number} distanceM */
function sizesFor(distanceM) {
  return { small: Math.ceil(19 * distanceM), body: Math.round(27 * distanceM), large: Math.round(31 * distanceM) };
}
