// @ts-check
/** Mouse and touch on the plots. */
import { MapView } from "./map_view.js";
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
