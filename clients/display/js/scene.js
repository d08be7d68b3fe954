// @ts-check
/** What all drawings of one moment are made from. */

/** @typedef {import("./types.js").LiveMap} LiveMap @typedef {import("./types.js").Cursor} Cursor */
/** @typedef {import("./types.js").ArrayBand} ArrayBand @typedef {import("./types.js").Range} Range */
/** @typedef {import("./types.js").Health} Health @typedef {import("./types.js").ArrayInfo} ArrayInfo */
/** @typedef {import("./axes.js").Look} Look @typedef {import("./beams.js").Line} Line */
/** @typedef {import("./freshness.js").Freshness} Freshness @typedef {import("./record.js").RecordStore} RecordStore */

/**
 * @typedef {object} Scene
 * @property {Look} look
 * @property {ArrayInfo | null} array
 * @property {ArrayBand | null} band
 * @property {Line | null} line of the band, with the hydrophones in use
 * @property {LiveMap | null} map
 * @property {Range} range of frequency shown, Hz
 * @property {Range} limits of the colour scale, dB
 * @property {Uint32Array} table (257,) colours of levels
 * @property {string} tableName changes with the table
 * @property {Cursor | null} cursor
 * @property {RecordStore} record
 * @property {Range} recordLimits of the record's colours, dB
 * @property {number} recordSpanS
 * @property {Health | null} health
 * @property {Freshness} freshness
 * @property {number} ageS
 */
export {};
