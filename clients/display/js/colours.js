// @ts-check
/** Colour arithmetic: sRGB, relative luminance and contrast (WCAG 2.2), OKLab (B. Ottosson 2020, public domain). */

/** @typedef {[number, number, number]} Rgb 0..255 each */

/** @param {number} c 0..1, sRGB @returns {number} linear light */
export function toLinear(c) {
  return c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
}

/** @param {number} c linear light, clipped to 0..1 @returns {number} sRGB */
export function toSrgb(c) {
  const clipped = Math.max(0, Math.min(1, c));
  return clipped <= 0.0031308 ? 12.92 * clipped : 1.055 * clipped ** (1 / 2.4) - 0.055;
}

/** @param {string} hex #rrggbb @returns {Rgb} */
export function rgbOf(hex) {
  const n = parseInt(hex.slice(1), 16);
  return [(n >> 16) & 255, (n >> 8) & 255, n & 255];
}

/** @param {Rgb} rgb @returns {string} #rrggbb */
export function hexOf(rgb) {
  return `#${rgb.map((c) => Math.round(c).toString(16).padStart(2, "0")).join("")}`;
}

/** @param {Rgb} rgb @returns {number} 0 black, 1 white */
export function luminance(rgb) {
  const [r, g, b] = rgb.map((c) => toLinear(c / 255));
  return 0.2126 * r + 0.7152 * g + 0.0722 * b;
}

/** The same colour with its light multiplied. @param {Rgb} rgb @param {number} factor 0..1 @returns {Rgb} */
export function dimmed(rgb, factor) {
  return /** @type {Rgb} */ (rgb.map((c) => Math.round(255 * toSrgb(toLinear(c / 255) * factor))));
}

/** @param {number} L @param {number} a @param {number} b OKLab @returns {Rgb} */
export function okLab(L, a, b) {
  const l = (L + 0.3963377774 * a + 0.2158037573 * b) ** 3;
  const m = (L - 0.1055613458 * a - 0.0638541728 * b) ** 3;
  const s = (L - 0.0894841775 * a - 1.291485548 * b) ** 3;
  const linear = [
    4.0767416621 * l - 3.3077115913 * m + 0.2309699292 * s,
    -1.2684380046 * l + 2.6097574011 * m - 0.3413193965 * s,
    -0.0041960863 * l - 0.7034186147 * m + 1.707614701 * s,
  ];
  return /** @type {Rgb} */ (linear.map((c) => Math.round(255 * toSrgb(c))));
}
