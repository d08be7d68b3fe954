// @ts-check
/** Everything an operator can do, with its key. */
import { next, DISTANCES_M, SPANS_S } from "./choices.js";
import { COLOUR_MAPS } from "./colourmaps.js";
import { DIMMER, TIMES } from "./palettes.js";
import { moveBy, toNextSummit, toOutstanding } from "./pointer.js";

/** @typedef {import("./keys.js").Action} Action @typedef {import("./display.js").Display} Display */

/** @param {Display} d @returns {Action[]} */
export function actionsOf(d) {
  return [...bandActions(d), ...zoomActions(d), ...pointerActions(d), ...recordActions(d), ...limitActions(d), ...screenActions(d)];
}

/** @param {Display} d @returns {Action[]} */
function bandActions(d) {
  return (d.array?.bands ?? []).slice(0, 9).map((band, i) => ({
    id: `band-${band.name}`, keys: [String(i + 1)], shown: String(i + 1), text: `band ${band.name}`,
    button: `band ${band.name}`, run: () => d.chooseBand(band.name),
  }));
}

/** @param {Display} d @returns {Action[]} */
function zoomActions(d) {
  return [
    { id: "zoom-in", keys: ["+", "="], shown: "+", text: "zoom in about the pointer (or the wheel)", button: "zoom in",
      run: () => d.zoom(0.5) },
    { id: "zoom-out", keys: ["-", "_"], shown: "-", text: "zoom out", button: "out", run: () => d.zoom(2) },
    { id: "zoom-all", keys: ["0"], shown: "0", text: "the whole band", button: "whole", run: () => d.zoom(Infinity) },
    { id: "pan-down", keys: [","], shown: ",", text: "to lower frequencies", run: () => d.pan(-0.25) },
    { id: "pan-up", keys: ["."], shown: ".", text: "to higher frequencies", run: () => d.pan(0.25) },
  ];
}

/** @param {Display} d @returns {Action[]} */
function pointerActions(d) {
  /** @type {[string, string, string, number, number][]} */
  const moves = [["forward", "ArrowUp", "↑", -1, 0], ["aft", "ArrowDown", "↓", 1, 0],
    ["lower", "ArrowLeft", "←", 0, -1], ["higher", "ArrowRight", "→", 0, 1]];
  return [
    ...moves.map(([id, key, shown, beams, bins]) => ({
      id: `move-${id}`, keys: [key], shown, text: `pointer one ${beams === 0 ? "bin" : "beam"} ${id} (Shift: ten)`,
      run: (/** @type {boolean} */ big) => moveBy(d, beams * (big ? 10 : 1), bins * (big ? 10 : 1)),
    })),
    { id: "outstanding", keys: ["m"], shown: "M", text: "pointer to the cell most over the mean over beams",
      button: "stands out", run: () => toOutstanding(d) },
    { id: "summit", keys: ["n"], shown: "N", text: "pointer to the next beam that stands out at this frequency",
      button: "next beam", run: () => toNextSummit(d) },
    { id: "pin", keys: ["h"], shown: "H", text: "hold the pointer, or let it go (or a click)", button: "hold",
      run: () => d.pin(!d.pinned) },
  ];
}

/** @param {Display} d @returns {Action[]} */
function recordActions(d) {
  return [
    { id: "span", keys: ["t"], shown: "T", text: "length of the record (Shift: back)", button: "record",
      run: (big) => d.choose({ spanS: next(SPANS_S, d.choices.spanS, big ? -1 : 1) }) },
    { id: "part", keys: ["r"], shown: "R", text: "range of frequency of the record (Shift: back)", button: "range",
      run: (big) => d.choosePart(big ? -1 : 1) },
  ];
}

/** @param {Display} d @returns {Action[]} */
function limitActions(d) {
  return [
    { id: "limit-auto", keys: ["a"], shown: "A", text: "level limits: slow automatic, or by hand", button: "auto",
      run: () => d.setLimits({ auto: !d.choices.auto }) },
    { id: "limit-low-down", keys: ["j"], shown: "J", text: "lower limit down 1 dB (Shift: 5)", button: "low -",
      run: (big) => d.shiftLimits(big ? -5 : -1, 0) },
    { id: "limit-low-up", keys: ["k"], shown: "K", text: "lower limit up 1 dB (Shift: 5)", button: "low +",
      run: (big) => d.shiftLimits(big ? 5 : 1, 0) },
    { id: "limit-high-down", keys: ["u"], shown: "U", text: "upper limit down 1 dB (Shift: 5)", button: "high -",
      run: (big) => d.shiftLimits(0, big ? -5 : -1) },
    { id: "limit-high-up", keys: ["i"], shown: "I", text: "upper limit up 1 dB (Shift: 5)", button: "high +",
      run: (big) => d.shiftLimits(0, big ? 5 : 1) },
  ];
}

/** @param {Display} d @returns {Action[]} */
function screenActions(d) {
  return [
    { id: "time", keys: ["p"], shown: "P", text: "day, dusk, night (Shift: back)", button: "day",
      run: (big) => d.choose({ time: next(TIMES, d.choices.time, big ? -1 : 1) }) },
    { id: "dim", keys: ["d"], shown: "D", text: "dimmer", button: "dim",
      run: (big) => d.choose({ dim: next(DIMMER.map((_, i) => i), d.choices.dim, big ? -1 : 1) }) },
    { id: "colours", keys: ["c"], shown: "C", text: "colours of levels: deep, viridis, grey", button: "colours",
      run: (big) => d.choose({ colours: next(COLOUR_MAPS, d.choices.colours, big ? -1 : 1) }) },
    { id: "distance", keys: ["v"], shown: "V", text: "viewing distance: size of letters", button: "eye",
      run: (big) => d.choose({ distanceM: next(DISTANCES_M, d.choices.distanceM, big ? -1 : 1) }) },
    { id: "keys", keys: ["F2"], shown: "F2", text: "single keys on or off", run: () => d.choose({ keys: !d.choices.keys }) },
    { id: "help", keys: ["?"], shown: "?", text: "this list, and the cautions", button: "keys", run: () => d.page.toggleHelp() },
  ];
}
