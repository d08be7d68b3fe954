// @ts-check
/**
 * What a single plane wave does to all beams of a line, from hydrophone positions and shading weights: the
 * pattern |sum w exp(j 2 pi f x (cos wave - cos beam) / c)|^2 and the half-power width (conventional beamforming).
 */

/** @typedef {import("./types.js").ArrayInfo} ArrayInfo @typedef {import("./types.js").ArrayBand} ArrayBand */

/**
 * @typedef {object} Line
 * @property {Float64Array} x m, of the hydrophones in use
 * @property {Float64Array} weights sum 1
 * @property {number} soundSpeed m/s
 * @property {number} halfPower width of the main lobe at broadside, in cosine times frequency over sound speed, 1/m
 */

/** @param {ArrayInfo} array @param {ArrayBand} band @returns {Line | null} null: no hydrophone is left */
export function lineOf(array, band) {
  if (band.weights === null) return null;
  /** @type {number[]} */
  const x = [];
  /** @type {number[]} */
  const weights = [];
  band.channels.forEach((channel, i) => {
    const weight = /** @type {number[]} */ (band.weights)[i];
    if (weight !== 0) {
      x.push(array.hydrophones[channel].position_m[0]);
      weights.push(weight);
    }
  });
  const line = { x: Float64Array.from(x), weights: Float64Array.from(weights), soundSpeed: array.sound_speed_m_s,
    halfPower: 0 };
  return { ...line, halfPower: halfPowerWidth(line) };
}

/** Power that a beam reads of a wave of power 1. @param {Line} line @param {number} v f (cos - cos) / c, 1/m */
export function pattern(line, v) {
  let re = 0;
  let im = 0;
  for (let m = 0; m < line.x.length; m++) {
    const phase = 2 * Math.PI * v * line.x[m];
    re += line.weights[m] * Math.cos(phase);
    im += line.weights[m] * Math.sin(phase);
  }
  return re * re + im * im;
}

/**
 * Levels that beams read of one plane wave.
 * @param {Line} line @param {Float64Array} cos of the beams @param {number} hz @param {number} waveCos
 * @param {Float32Array} into (beams,) dB re the wave, -120 and above
 */
export function patternLevels(line, cos, hz, waveCos, into) {
  for (let i = 0; i < cos.length; i++) {
    const power = pattern(line, (hz / line.soundSpeed) * (waveCos - cos[i]));
    into[i] = 10 * Math.log10(Math.max(power, 1e-12));
  }
}

/** First fall to half on one side, doubled. @param {Line} line */
function halfPowerWidth(line) {
  const aperture = line.x.reduce((a, b) => Math.max(a, b)) - line.x.reduce((a, b) => Math.min(a, b));
  if (aperture <= 0) return Infinity;
  const step = 0.02 / aperture;
  let high = step;
  while (pattern(line, high) > 0.5) {
    high += step;
    if (high > 4 / aperture) return Infinity;
  }
  let low = high - step;
  for (let i = 0; i < 40; i++) {
    const middle = (low + high) / 2;
    if (pattern(line, middle) > 0.5) low = middle;
    else high = middle;
  }
  return 2 * low;
}

/** Half-power width in cosine. @param {Line} line @param {number} hz */
export function widthInCosine(line, hz) {
  return (line.halfPower * line.soundSpeed) / hz;
}

/**
 * Half-power width in degrees of a beam; null where it falls to half on neither side of the line's own space.
 * @param {Line} line @param {number} hz @param {number} cos
 */
export function widthDeg(line, hz, cos) {
  const half = widthInCosine(line, hz) / 2;
  if (cos + half > 1 && cos - half < -1) return null;
  return angleDeg(Math.max(-1, cos - half)) - angleDeg(Math.min(1, cos + half));
}

/** @param {number} cos @returns {number} cone angle, degrees */
export function angleDeg(cos) {
  return (Math.acos(Math.max(-1, Math.min(1, cos))) * 180) / Math.PI;
}
