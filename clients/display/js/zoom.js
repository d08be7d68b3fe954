// @ts-check
/** Which frequencies are shown. */

/** @typedef {import("./types.js").Range} Range */

const LEAST_SPAN_HZ = 20;

/**
 * @param {Range} now shown @param {Range} whole the band @param {number} factor of the span; Infinity: the whole band
 * @param {number} [about] Hz that stays where it is, if it is in view @returns {Range | null} null: the whole band
 */
export function zoomed(now, whole, factor, about) {
  const span = Math.max((now.high - now.low) * factor, LEAST_SPAN_HZ);
  if (span >= whole.high - whole.low) return null;
  const middle = about === undefined || about < now.low || about > now.high ? (now.low + now.high) / 2 : about;
  const share = (middle - now.low) / (now.high - now.low);
  const low = Math.max(whole.low, Math.min(whole.high - span, middle - share * span));
  return { low, high: low + span };
}

/** @param {Range} now @param {Range} whole @param {number} share of the span @returns {Range} */
export function panned(now, whole, share) {
  const span = now.high - now.low;
  const low = Math.max(whole.low, Math.min(whole.high - span, now.low + share * span));
  return { low, high: low + span };
}
