// @ts-check
/** The frequency-bearing map: frequency to the right, cone angle downwards, forward on top. */
import { bearingAxis, border, clear, label, lowerAxis, staleMark, unknown, visible } from "./axes.js";
import { widthInCosine } from "./beams.js";
import { colourBytes } from "./colourmaps.js";
import { place, rowOf } from "./scale.js";
import { Cells } from "./surface.js";

/** @typedef {import("./scene.js").Scene} Scene @typedef {import("./surface.js").Surface} Surface */
/** @typedef {import("./types.js").LiveMap} LiveMap @typedef {import("./types.js").Plot} Plot */

export class MapView {
  constructor() {
    this.cells = new Cells();
    this.bytes = new Uint32Array(256);
    /** @type {LiveMap | null} */
    this.made = null;
    this.madeOf = "";
  }

  /** @param {Surface} surface @param {number} small @returns {Plot} */
  static plot(surface, small) {
    const [left, bottom] = [small * 4.2, small * 2.4 + 8];
    return { left, top: 4, width: Math.max(10, surface.width - left - 8), height: Math.max(10, surface.height - bottom - 4) };
  }

  /** @param {Surface} surface @param {Scene} scene */
  draw(surface, scene) {
    const { ctx } = surface;
    const { look } = scene;
    const plot = MapView.plot(surface, look.small);
    clear(ctx, look, surface.width, surface.height);
    unknown(ctx, look, plot);
    ctx.save();
    ctx.beginPath();
    ctx.rect(plot.left, plot.top, plot.width, plot.height);
    ctx.clip();
    if (scene.map !== null) this.drawLevels(ctx, plot, scene, scene.map);
    drawAlias(ctx, plot, scene);
    drawCursor(ctx, plot, scene);
    staleMark(ctx, look, plot, scene.freshness, scene.ageS);
    ctx.restore();
    border(ctx, look, plot);
    bearingAxis(ctx, look, plot);
    lowerAxis(ctx, look, plot, scene.range, (hz) => String(Math.round(hz * 10) / 10), "frequency, Hz");
    ends(ctx, look, plot);
    surface.tell({ left: plot.left, top: plot.top, width: plot.width, height: plot.height, low: scene.range.low,
      high: scene.range.high, t: scene.map === null ? "" : scene.map.tEndMs.toFixed(3) });
  }

  /** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {LiveMap} map */
  drawLevels(ctx, plot, scene, map) {
    const of = `${scene.limits.low} ${scene.limits.high} ${scene.tableName}`;
    if (this.made !== map || this.madeOf !== of) {
      this.cells.resize(map.bins, map.beams);
      colourBytes(scene.table, map.floorDb, map.stepDb, scene.limits, this.bytes);
      const { pixels } = this.cells;
      const { level } = map;
      const { bytes } = this;
      for (let i = 0; i < level.length; i++) pixels[i] = bytes[level[i]];
      this.cells.commit();
      [this.made, this.madeOf] = [map, of];
    }
    const half = (map.cos[0] - map.cos[map.beams - 1]) / Math.max(1, map.beams - 1) / 2;
    const y0 = rowOf(plot, map.cos[0] + half);
    const y1 = rowOf(plot, map.cos[map.beams - 1] - half);
    const x0 = place(scene.range, plot.left, plot.width, map.f0Hz - map.dfHz / 2);
    const x1 = place(scene.range, plot.left, plot.width, map.f0Hz + (map.bins - 0.5) * map.dfHz);
    this.cells.draw(ctx, x0, y0, x1 - x0, y1 - y0);
  }
}

/** Where a beam begins to hear a second direction. @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene */
function drawAlias(ctx, plot, scene) {
  const beams = scene.band?.beams ?? [];
  const points = [];
  for (const beam of beams) {
    if (beam.alias_hz === null) continue;
    points.push([place(scene.range, plot.left, plot.width, beam.alias_hz),
      rowOf(plot, Math.cos((beam.cone_deg * Math.PI) / 180))]);
  }
  if (!points.some(([x]) => x < plot.left + plot.width)) return;
  for (let i = 1; i < points.length; i += 3) {
    const [from, to] = [points[i - 1], points[Math.min(i + 1, points.length - 1)]];
    visible(ctx, from[0], from[1], to[0], to[1], scene.look);
  }
  const inside = points.filter(([x]) => x > plot.left + 20 && x < plot.left + plot.width - 120);
  const at = inside[Math.floor(inside.length * 0.12)] ?? null;
  if (at !== null) label(ctx, scene.look, "images beyond", at[0] + 6, at[1] - scene.look.small / 2);
}

/** Cross and beamwidth. @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene */
function drawCursor(ctx, plot, scene) {
  if (scene.cursor === null) return;
  const x = place(scene.range, plot.left, plot.width, scene.cursor.hz);
  const y = rowOf(plot, scene.cursor.cos);
  const gap = 9;
  const { look } = scene;
  visible(ctx, plot.left, y, x - gap, y, look, [6, 4]);
  visible(ctx, x + gap, y, plot.left + plot.width, y, look, [6, 4]);
  visible(ctx, x, plot.top, x, y - gap, look, [6, 4]);
  visible(ctx, x, y + gap, x, plot.top + plot.height, look, [6, 4]);
  if (scene.line === null) return;
  const half = widthInCosine(scene.line, scene.cursor.hz) / 2;
  const [upper, lower] = [rowOf(plot, scene.cursor.cos + half), rowOf(plot, scene.cursor.cos - half)];
  for (const side of [upper, lower]) visible(ctx, x - 5, side, x + 5, side, look);
  visible(ctx, x, upper, x, Math.min(lower, y - 2), look);
  visible(ctx, x, Math.max(upper, y + 2), x, lower, look);
}

/** @param {CanvasRenderingContext2D} ctx @param {import("./axes.js").Look} look @param {Plot} plot */
function ends(ctx, look, plot) {
  ctx.textBaseline = "top";
  ctx.textAlign = "left";
  ctx.fillStyle = look.palette.text;
  const x = look.small * 0.1;
  ctx.save();
  ctx.translate(look.small * 0.7, plot.top);
  ctx.rotate(-Math.PI / 2);
  ctx.textBaseline = "middle";
  ctx.textAlign = "right";
  ctx.fillText("forward", x, 0);
  ctx.textAlign = "left";
  ctx.fillText("aft", -plot.height, 0);
  ctx.restore();
}
