// @ts-check
/**
 * Shapes that several modules share.
 *
 * @typedef {object} LiveMap One map as it came, reduced by the service.
 * @property {string} band
 * @property {number} tEndMs data time, ms since 1970 UTC
 * @property {number} beams
 * @property {number} bins
 * @property {Float64Array} cos (beams,) cosine of each beam's cone angle, falling
 * @property {number} f0Hz of bin 0
 * @property {number} dfHz
 * @property {Uint8Array} level (beams * bins,) level = floorDb + stepDb * byte
 * @property {number} floorDb dB re 1 µPa²/Hz
 * @property {number} stepDb
 * @property {number} spanS
 * @property {number} averages
 * @property {MapLimits} limits
 * @property {number | null} latencyMs
 * @property {number} skipped
 *
 * @typedef {object} MapLimits
 * @property {number} channels_used
 * @property {number} channels
 * @property {boolean} gap
 * @property {number} clipped
 * @property {number | null} alias_hz
 * @property {number} masked
 *
 * @typedef {object} ArrayInfo answer of /api/v1/array
 * @property {string} array
 * @property {number} sound_speed_m_s
 * @property {boolean} calibrated
 * @property {{i: number, position_m: number[], used: boolean, why: string | null}[]} hydrophones
 * @property {ArrayBand[]} bands
 *
 * @typedef {object} ArrayBand
 * @property {string} name
 * @property {number[]} band_hz
 * @property {number[]} channels
 * @property {number[] | null} weights
 * @property {number} df_hz
 * @property {number | null} spacing_m
 * @property {{cone_deg: number, alias_hz: number | null}[]} beams
 *
 * @typedef {object} Health
 * @property {number} used
 * @property {{i: number, state: string, level_db: number | null, why: string | null}[]} channels
 *
 * @typedef {object} Status
 * @property {string} state
 * @property {number} load
 * @property {{p50: number | null, p99: number | null}} latency_ms
 * @property {number} gaps
 * @property {number} lost_samples
 * @property {Record<string, number>} dropped
 * @property {{name: string, state: string, why?: string | null}[]} processes
 * @property {Record<string, {load: number, stale: boolean, dropped_hops: number,
 *   latency_ms: {p50: number | null, p99: number | null}}>} bands
 *
 * @typedef {object} Cursor where the pointer is
 * @property {number} cos cosine of the cone angle
 * @property {number} hz
 *
 * @typedef {object} Plot the part of a canvas in which data are drawn, CSS pixels
 * @property {number} left
 * @property {number} top
 * @property {number} width
 * @property {number} height
 *
 * @typedef {object} Range
 * @property {number} low
 * @property {number} high
 *
 * @typedef {object} Hole
 * @property {number} tMs
 * @property {number} tEndMs
 * @property {string} why
 */
export {};
