// @ts-check
/** Numbers as the watch reads them: units always, bearings in three figures, UTC said. */
import { angleDeg } from "./beams.js";

/** @param {number} ms since 1970 UTC @param {boolean} [seconds] */
export function clock(ms, seconds = true) {
  return new Date(ms).toISOString().slice(11, seconds ? 19 : 16);
}

/** Three figures and a tenth. @param {number} deg */
export function bearing(deg) {
  const tenths = Math.round(deg * 10) / 10;
  return `${(tenths >= 360 ? 0 : tenths).toFixed(1).padStart(5, "0")}°`;
}

/** Both sides: a line cannot tell them apart. @param {number} cos */
export function relative(cos) {
  const cone = angleDeg(cos);
  const [starboard, port] = [bearing(cone), bearing((360 - cone) % 360)];
  if (starboard === port) return `R ${starboard} ${cos > 0 ? "ahead" : "astern"}`;
  return `R ${starboard} starboard or ${port} port`;
}

/** @param {number} hz */
export function frequency(hz) {
  return hz < 1000 ? `${hz.toFixed(hz < 100 ? 1 : 0)} Hz` : `${(hz / 1000).toFixed(3)} kHz`;
}

/** @param {number} db */
export function level(db) {
  return `${db.toFixed(1)} dB`;
}

/** How long ago, in whole seconds, minutes, hours. @param {number} seconds */
export function age(seconds) {
  const s = Math.floor(seconds);
  if (s < 60) return `${s} s`;
  const minutes = `${Math.floor(s / 60) % 60} min`;
  return s < 3600 ? `${minutes} ${s % 60} s` : `${Math.floor(s / 3600)} h ${minutes}`;
}
