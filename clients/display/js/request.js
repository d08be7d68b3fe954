// @ts-check
/** What is asked of the live socket: maps no finer than they are drawn, and states. */

/** @typedef {import("./types.js").ArrayBand} ArrayBand @typedef {import("./types.js").Range} Range */

/** Cells of a map: at 8 maps a second under 620 kB/s. */
const CELLS = 76_000;
const RATE_HZ = 8;

/**
 * @param {ArrayBand} band @param {{columns: number, rows: number}} pixels of the device, of the map
 * @param {Range | null} zoomed frequencies shown; null: the whole band
 */
export function mapRequest(band, pixels, zoomed) {
  const most = Math.max(32, pixels.rows);
  const beams = Math.ceil(band.beams.length / Math.ceil(band.beams.length / most));
  const bins = Math.max(16, Math.min(pixels.columns, Math.floor(CELLS / beams)));
  const part = zoomed === null ? {} : { f_min: Math.max(0, zoomed.low - band.df_hz), f_max: zoomed.high + band.df_hz };
  const map = { bands: [band.name], bins, beams: most, encoding: "u1", rate_hz: RATE_HZ, ...part };
  return { subscribe: ["map", "health", "status"], map };
}

/** Of a page that nobody sees. */
export const STATES_ONLY = { subscribe: ["health", "status"] };
