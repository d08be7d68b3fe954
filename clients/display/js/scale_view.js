// @ts-check
/** The colour scale: which colour is which level, with the colour of what is over the top. */
import { clear, label } from "./axes.js";
import { place, ticks } from "./scale.js";
import { Cells } from "./surface.js";

/** @typedef {import("./scene.js").Scene} Scene @typedef {import("./surface.js").Surface} Surface */

export class ScaleView {
  constructor() {
    this.cells = new Cells();
  }

  /** @param {Surface} surface @param {Scene} scene */
  draw(surface, scene) {
    const { ctx } = surface;
    const { look, limits, table } = scene;
    clear(ctx, look, surface.width, surface.height);
    const over = look.small * 2.6;
    const plot = { left: 12, top: 4, width: Math.max(10, surface.width - 24 - over), height: Math.max(6, surface.height - look.small - 14) };
    this.cells.resize(256, 1);
    this.cells.pixels.set(table.subarray(0, 256));
    this.cells.commit();
    this.cells.draw(ctx, plot.left, plot.top, plot.width, plot.height);
    this.cells.resize(1, 1);
    this.cells.pixels[0] = table[256];
    this.cells.commit();
    this.cells.draw(ctx, plot.left + plot.width + 6, plot.top, over, plot.height);
    ctx.strokeStyle = look.palette.text;
    ctx.fillStyle = look.palette.text;
    ctx.textAlign = "center";
    ctx.textBaseline = "top";
    const bottom = plot.top + plot.height;
    ctx.beginPath();
    for (const value of ticks(limits, Math.max(2, plot.width / (look.small * 3)))) {
      const x = Math.round(place(limits, plot.left, plot.width, value)) + 0.5;
      ctx.moveTo(x, bottom);
      ctx.lineTo(x, bottom + 4);
      ctx.fillText(String(value), x, bottom + 6);
    }
    ctx.stroke();
    ctx.fillText("over", plot.left + plot.width + 6 + over / 2, bottom + 6);
    if (scene.array !== null && !scene.array.calibrated) label(ctx, look, "uncalibrated", plot.left + 4, plot.top + 2, "caution");
    surface.tell({ low: limits.low, high: limits.high });
  }
}
