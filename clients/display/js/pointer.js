// @ts-check
/** The pointer: by mouse and touch on the plots, and by steps and jumps. */
import { MapView } from "./map_view.js";
import { nextSummit, outstanding } from "./readout.js";
import { cosAt, valueAt } from "./scale.js";

/** @typedef {import("./display.js").Display} Display @typedef {import("./types.js").Plot} Plot */

/** @param {Display} d */
export function followPointer(d) {
  /** @type {["record" | "map" | "response" | "spectrum", boolean, boolean][]} canvas, has bearing, has frequency */
  const plots = [["record", true, false], ["map", true, true], ["response", true, false], ["spectrum", false, true]];
  for (const [name, bearing, frequency] of plots) {
    const to = (/** @type {number} */ x, /** @type {number} */ y) => {
      const plot = plotOf(d, name);
      const inside = x >= plot.left && x <= plot.left + plot.width && y >= plot.top && y <= plot.top + plot.height;
      if (inside) {
        d.point({ ...(bearing ? { cos: cosAt(plot, y) } : {}),
          ...(frequency ? { hz: valueAt(d.range, plot.left, plot.width, x) } : {}) });
      }
      return inside;
    };
    d.page.onPointer(name, "pointermove", (x, y) => d.pinned || to(x, y));
    d.page.onPointer(name, "click", (x, y) => {
      if (d.pinned) d.pin(false);
      else if (to(x, y)) d.pin(true);
      to(x, y);
    });
    if (frequency) {
      d.page.onPointer(name, "wheel", (x, _, event) => {
        event.preventDefault();
        const plot = plotOf(d, name);
        if (event.shiftKey) d.pan(event.deltaY > 0 || event.deltaX > 0 ? 0.1 : -0.1);
        else d.zoom(event.deltaY > 0 ? 1.25 : 0.8, valueAt(d.range, plot.left, plot.width, x));
      });
    }
  }
}

/** @param {Display} d @param {"record" | "map" | "response" | "spectrum"} name @returns {Plot} as last drawn */
function plotOf(d, name) {
  const { left, top, width, height } = d.page.surfaces[name].canvas.dataset;
  if (left === undefined) return MapView.plot(d.page.surfaces[name], d.look.small);
  return { left: Number(left), top: Number(top), width: Number(width), height: Number(height) };
}

/** @param {Display} d @param {number} beams aft @param {number} bins up */
export function moveBy(d, beams, bins) {
  if (d.map === null || d.cursor === null) return;
  d.pin(true);
  const step = (d.map.cos[0] - d.map.cos[d.map.beams - 1]) / Math.max(1, d.map.beams - 1);
  d.point({ cos: d.cursor.cos - beams * step, hz: d.cursor.hz + bins * d.map.dfHz });
}

/** To the cell most over the mean over beams. @param {Display} d */
export function toOutstanding(d) {
  const found = d.map === null ? null : outstanding(d.map, d.range);
  if (found === null) return;
  d.pin(true);
  d.point(found);
}

/** To the next beam that stands out at this frequency. @param {Display} d */
export function toNextSummit(d) {
  if (d.map === null || d.cursor === null) return;
  const cos = nextSummit(d.map, d.cursor.hz, d.cursor.cos);
  if (cos === null) return;
  d.pin(true);
  d.point({ cos });
}
