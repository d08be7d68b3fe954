// @ts-check
/**
 * Level over bearing at the pointer's frequency, and under it what all beams would read of one plane wave from the beam
 * under the pointer, at the level there: what stands out of it is something else.
 */
import { border, clear, label, sideways, staleMark, visible } from "./axes.js";
import { patternLevels, widthInCosine } from "./beams.js";
import { beamAt, binAt, levelAt } from "./frame.js";
import { angleTicks, place, rowOf, ticks } from "./scale.js";

/** @typedef {import("./scene.js").Scene} Scene @typedef {import("./surface.js").Surface} Surface */
/** @typedef {import("./types.js").LiveMap} LiveMap @typedef {import("./types.js").Plot} Plot */
/** @typedef {import("./types.js").Range} Range */

export class ResponseView {
  constructor() {
    this.predicted = new Float32Array(0);
    this.of = "";
    /** Where the key stands, 0 at the top to 1. */
    this.keyAt = 0;
    /** Beam at which the plane wave is put; -1 without one. */
    this.wave = -1;
  }

  /** @param {Surface} surface @param {Scene} scene */
  draw(surface, scene) {
    const { ctx } = surface;
    const { look, map } = scene;
    const right = look.small * 6.4;
    const bottom = look.small * 2.4 + 8;
    const plot = { left: 4, top: 4, width: Math.max(10, surface.width - right - 4), height: Math.max(10, surface.height - bottom - 4) };
    clear(ctx, look, surface.width, surface.height);
    ctx.fillStyle = look.palette.page;
    ctx.fillRect(plot.left, plot.top, plot.width, plot.height);
    const range = { low: scene.limits.low - 6, high: scene.limits.high + 6 };
    grid(ctx, plot, scene, range);
    ctx.save();
    ctx.beginPath();
    ctx.rect(plot.left, plot.top, plot.width, plot.height);
    ctx.clip();
    this.wave = -1;
    if (map !== null && scene.cursor !== null) this.drawLines(ctx, plot, scene, map, range);
    if (scene.cursor !== null) {
      const y = rowOf(plot, scene.cursor.cos);
      visible(ctx, plot.left, y, plot.left + plot.width, y, look, [6, 4]);
    }
    if (this.wave >= 0) this.drawKey(ctx, plot, look);
    staleMark(ctx, look, plot, scene.freshness, scene.ageS);
    ctx.restore();
    border(ctx, look, plot);
    sides(ctx, plot, scene);
    surface.tell({ left: plot.left, top: plot.top, width: plot.width, height: plot.height, low: range.low, high: range.high });
  }

  /** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {LiveMap} map @param {Range} range */
  drawLines(ctx, plot, scene, map, range) {
    const cursor = /** @type {import("./types.js").Cursor} */ (scene.cursor);
    const bin = binAt(map, cursor.hz);
    const { line } = scene;
    if (line !== null) {
      this.wave = summit(map, bin, cursor.cos, widthInCosine(line, cursor.hz));
      this.predict(scene, map, cursor.hz);
      const peak = levelAt(map, this.wave, bin);
      ctx.fillStyle = scene.look.palette.mean;
      ctx.globalAlpha = 0.35;
      path(ctx, plot, map, range, (beam) => peak + this.predicted[beam]);
      ctx.lineTo(plot.left, plot.top + plot.height);
      ctx.lineTo(plot.left, plot.top);
      ctx.fill();
      ctx.globalAlpha = 1;
    }
    ctx.strokeStyle = scene.look.palette.beam;
    ctx.lineWidth = 1.8;
    path(ctx, plot, map, range, (beam) => levelAt(map, beam, bin));
    ctx.stroke();
    ctx.lineWidth = 1;
  }

  /** What is what, where the line is lowest. @param {CanvasRenderingContext2D} ctx @param {Plot} plot
   * @param {import("./axes.js").Look} look */
  drawKey(ctx, plot, look) {
    const words = ["line: beams", "filled: one wave"];
    const wide = Math.max(...words.map((word) => ctx.measureText(word).width)) + 12;
    const top = plot.top + 4 + this.keyAt * (plot.height - 2 * look.small - 24);
    words.forEach((word, i) => label(ctx, look, word, plot.left + plot.width - wide, top + i * (look.small + 6)));
  }

  /** Eighth of the plot in which the line stays lowest. @param {LiveMap} map @param {number} bin */
  lowest(map, bin) {
    let [best, least] = [0, Infinity];
    for (let part = 0; part < 8; part++) {
      let top = -Infinity;
      for (let beam = 0; beam < map.beams; beam++) {
        const place = ((1 - map.cos[beam]) / 2) * 8;
        if (place > part - 0.5 && place < part + 1.5) top = Math.max(top, levelAt(map, beam, bin));
      }
      if (top < least) [best, least] = [part / 7, top];
    }
    return best;
  }

  /** @param {Scene} scene @param {LiveMap} map @param {number} hz */
  predict(scene, map, hz) {
    const line = /** @type {import("./beams.js").Line} */ (scene.line);
    const of = `${map.band} ${map.beams} ${line.x.length} ${hz} ${this.wave}`;
    if (this.of === of) return;
    this.of = of;
    this.keyAt = this.lowest(map, binAt(map, hz));
    if (this.predicted.length !== map.beams) this.predicted = new Float32Array(map.beams);
    patternLevels(line, map.cos, hz, map.cos[this.wave], this.predicted);
  }
}

/** The loudest beam within half a beamwidth of the pointer. @param {LiveMap} map @param {number} bin @param {number} cos
 * @param {number} width @returns {number} */
function summit(map, bin, cos, width) {
  let best = beamAt(map.cos, cos);
  for (let beam = 0; beam < map.beams; beam++) {
    if (Math.abs(map.cos[beam] - cos) <= width / 2 && levelAt(map, beam, bin) > levelAt(map, best, bin)) best = beam;
  }
  return best;
}

/** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {LiveMap} map @param {Range} range
 * @param {(beam: number) => number} level */
function path(ctx, plot, map, range, level) {
  ctx.beginPath();
  for (let beam = 0; beam < map.beams; beam++) {
    const x = place(range, plot.left, plot.width, Math.max(range.low, level(beam)));
    const y = rowOf(plot, map.cos[beam]);
    if (beam === 0) ctx.moveTo(x, y);
    else ctx.lineTo(x, y);
  }
}

/** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {Range} range */
function grid(ctx, plot, scene, range) {
  const { look } = scene;
  const bottom = plot.top + plot.height;
  ctx.fillStyle = look.palette.text;
  ctx.textAlign = "center";
  ctx.textBaseline = "top";
  ctx.beginPath();
  for (const value of ticks(range, Math.max(2, plot.width / (look.small * 3.4)))) {
    const x = Math.round(place(range, plot.left, plot.width, value)) + 0.5;
    ctx.moveTo(x, plot.top);
    ctx.lineTo(x, bottom);
    ctx.fillText(String(value), Math.max(x, plot.left + look.small * 0.7), bottom + 5);
  }
  ctx.strokeStyle = look.palette.faint;
  ctx.globalAlpha = 0.5;
  ctx.stroke();
  ctx.globalAlpha = 1;
  ctx.fillText("dB re 1 µPa²/Hz", plot.left + plot.width / 2, bottom + 6 + look.small);
}

/** Relative bearings of both sides. @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene */
function sides(ctx, plot, scene) {
  const { look } = scene;
  ctx.fillStyle = look.palette.text;
  ctx.strokeStyle = look.palette.text;
  ctx.textBaseline = "middle";
  ctx.textAlign = "left";
  const x = plot.left + plot.width;
  ctx.beginPath();
  for (const angle of angleTicks(plot, look.small)) {
    const y = Math.round(rowOf(plot, Math.cos((angle * Math.PI) / 180))) + 0.5;
    ctx.moveTo(x, y);
    ctx.lineTo(x + 4, y);
    const other = angle % 180 === 0 ? "" : `|${String(360 - angle).padStart(3, "0")}`;
    ctx.fillText(`${String(angle).padStart(3, "0")}${other}`, x + 6, y);
  }
  ctx.stroke();
  sideways(ctx, "relative, ° starboard|port", x + look.small * 5.9, plot.top + plot.height / 2);
}
