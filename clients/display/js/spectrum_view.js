// @ts-check
/** Level over frequency: the beam under the pointer against the mean over all beams; the map's frequency axis. */
import { border, clear, lowerAxis, sideways, staleMark, visible } from "./axes.js";
import { averageOverBeams, beamAt, levelAt } from "./frame.js";
import { place, ticks } from "./scale.js";

/** @typedef {import("./scene.js").Scene} Scene @typedef {import("./surface.js").Surface} Surface */
/** @typedef {import("./types.js").LiveMap} LiveMap @typedef {import("./types.js").Plot} Plot */

export class SpectrumView {
  constructor() {
    this.mean = new Float32Array(0);
    this.beam = new Float32Array(0);
    /** @type {LiveMap | null} */
    this.meanOf = null;
  }

  /** @param {Surface} surface @param {Scene} scene */
  draw(surface, scene) {
    const { ctx } = surface;
    const { look, map } = scene;
    const [left, bottom] = [look.small * 4.2, look.small * 2.4 + 8];
    const plot = { left, top: 4, width: Math.max(10, surface.width - left - 8), height: Math.max(10, surface.height - bottom - 4) };
    clear(ctx, look, surface.width, surface.height);
    ctx.fillStyle = look.palette.page;
    ctx.fillRect(plot.left, plot.top, plot.width, plot.height);
    const range = { low: scene.limits.low - 6, high: scene.limits.high + 6 };
    levelGrid(ctx, plot, scene, range);
    ctx.save();
    ctx.beginPath();
    ctx.rect(plot.left, plot.top, plot.width, plot.height);
    ctx.clip();
    if (map !== null) this.drawLines(ctx, plot, scene, map, range);
    if (scene.cursor !== null) {
      const x = place(scene.range, plot.left, plot.width, scene.cursor.hz);
      visible(ctx, x, plot.top, x, plot.top + plot.height, look, [6, 4]);
    }
    staleMark(ctx, look, plot, scene.freshness, scene.ageS);
    ctx.restore();
    border(ctx, look, plot);
    lowerAxis(ctx, look, plot, scene.range, (hz) => String(Math.round(hz * 10) / 10), "frequency, Hz");
    surface.tell({ left: plot.left, top: plot.top, width: plot.width, height: plot.height, low: range.low, high: range.high });
  }

  /** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {LiveMap} map
   * @param {import("./types.js").Range} range */
  drawLines(ctx, plot, scene, map, range) {
    if (this.mean.length < map.bins) [this.mean, this.beam] = [new Float32Array(map.bins), new Float32Array(map.bins)];
    if (this.meanOf !== map) averageOverBeams(map, this.mean);
    this.meanOf = map;
    const { palette } = scene.look;
    trace(ctx, plot, scene, map, this.mean, range, palette.mean, 1.6, [5, 3]);
    if (scene.cursor === null) return;
    const beam = beamAt(map.cos, scene.cursor.cos);
    for (let bin = 0; bin < map.bins; bin++) this.beam[bin] = levelAt(map, beam, bin);
    trace(ctx, plot, scene, map, this.beam, range, palette.beam, 1.6, []);
  }
}

/** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {LiveMap} map
 * @param {Float32Array} levels @param {import("./types.js").Range} range @param {string} colour @param {number} width
 * @param {number[]} dash */
function trace(ctx, plot, scene, map, levels, range, colour, width, dash) {
  ctx.strokeStyle = colour;
  ctx.lineWidth = width;
  ctx.setLineDash(dash);
  ctx.beginPath();
  for (let bin = 0; bin < map.bins; bin++) {
    const x = place(scene.range, plot.left, plot.width, map.f0Hz + bin * map.dfHz);
    const y = plot.top + plot.height - place(range, 0, plot.height, levels[bin]);
    if (bin === 0) ctx.moveTo(x, y);
    else ctx.lineTo(x, y);
  }
  ctx.stroke();
  ctx.setLineDash([]);
  ctx.lineWidth = 1;
}

/** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {import("./types.js").Range} range */
function levelGrid(ctx, plot, scene, range) {
  const { look } = scene;
  ctx.textAlign = "right";
  ctx.textBaseline = "middle";
  ctx.beginPath();
  for (const value of ticks(range, Math.max(2, plot.height / (look.small * 2.2)))) {
    const y = Math.round(plot.top + plot.height - place(range, 0, plot.height, value)) + 0.5;
    ctx.moveTo(plot.left, y);
    ctx.lineTo(plot.left + plot.width, y);
    ctx.fillStyle = look.palette.text;
    ctx.fillText(String(value), plot.left - 6, y);
  }
  ctx.strokeStyle = look.palette.faint;
  ctx.globalAlpha = 0.5;
  ctx.stroke();
  ctx.globalAlpha = 1;
  ctx.fillStyle = look.palette.text;
  sideways(ctx, "dB re 1 µPa²/Hz", look.small * 0.7, plot.top + plot.height / 2);
}
