// @ts-check
/** The bearing-time record: time to the right, now at the edge that touches the map; the map's bearing axis. */
import { bearingAxis, border, clear, label, unknown, visible } from "./axes.js";
import { placeOf } from "./colourmaps.js";
import { place, rowOf, timeTicks } from "./scale.js";
import { Cells } from "./surface.js";
import { clock } from "./wording.js";

/** @typedef {import("./scene.js").Scene} Scene @typedef {import("./surface.js").Surface} Surface */
/** @typedef {import("./types.js").Plot} Plot @typedef {import("./record.js").RecordStore} RecordStore */

export class RecordView {
  constructor() {
    this.cells = new Cells();
    this.sums = new Float64Array(0);
    this.maps = new Uint16Array(0);
    this.made = "";
    this.endMs = 0;
  }

  /** @param {Surface} surface @param {number} small @returns {Plot} */
  static plot(surface, small) {
    const [left, bottom] = [small * 4.2, small * 2.4 + 8];
    return { left, top: 4, width: Math.max(10, surface.width - left - 6), height: Math.max(10, surface.height - bottom - 4) };
  }

  /** @param {Surface} surface @param {Scene} scene */
  draw(surface, scene) {
    const { ctx } = surface;
    const { look, record } = scene;
    const plot = RecordView.plot(surface, look.small);
    clear(ctx, look, surface.width, surface.height);
    unknown(ctx, look, plot);
    ctx.save();
    ctx.beginPath();
    ctx.rect(plot.left, plot.top, plot.width, plot.height);
    ctx.clip();
    const range = { low: 0, high: 1 };
    if (record.rows > 0) {
      const columns = Math.max(1, Math.round(plot.width));
      this.make(scene, columns);
      range.high = this.endMs;
      range.low = this.endMs - scene.recordSpanS * 1000;
      const half = (record.cos[0] - record.cos[record.beams - 1]) / Math.max(1, record.beams - 1) / 2;
      const y0 = rowOf(plot, record.cos[0] + half);
      this.cells.draw(ctx, plot.left, y0, plot.width, rowOf(plot, record.cos[record.beams - 1] - half) - y0);
      drawHoles(ctx, plot, scene, range);
    } else label(ctx, look, "no record yet", plot.left + 10, plot.top + 10);
    if (scene.cursor !== null) {
      const y = rowOf(plot, scene.cursor.cos);
      visible(ctx, plot.left, y, plot.left + plot.width, y, look, [6, 4]);
    }
    ctx.restore();
    border(ctx, look, plot);
    bearingAxis(ctx, look, plot);
    if (record.rows > 0) timeAxis(ctx, plot, scene, range);
    surface.tell({ left: plot.left, top: plot.top, width: plot.width, height: plot.height, low: range.low,
      high: range.high, rows: record.rows, holes: record.holes.length });
  }

  /**
   * Colours of all columns, each the mean power of the rows in its stretch of time.
   * @param {Scene} scene @param {number} columns
   */
  make(scene, columns) {
    const { record, recordLimits: limits } = scene;
    const stepMs = (scene.recordSpanS * 1000) / columns;
    const of = `${record.count} ${columns} ${stepMs} ${limits.low} ${limits.high} ${scene.tableName}`;
    if (of === this.made) return;
    this.made = of;
    const last = Math.floor(record.newestMs / stepMs);
    this.endMs = (last + 1) * stepMs;
    this.cells.resize(columns, record.beams);
    if (this.sums.length !== columns * record.beams) this.sums = new Float64Array(columns * record.beams);
    if (this.maps.length !== columns) this.maps = new Uint16Array(columns);
    this.sums.fill(0);
    this.maps.fill(0);
    this.gather(record, last - columns + 1, stepMs);
    this.spread(columns, stepMs);
    const { pixels } = this.cells;
    const factor = 10 / Math.LN10;
    for (let beam = 0, at = 0; beam < record.beams; beam++) {
      for (let column = 0; column < columns; column++, at++) {
        const rows = this.maps[column];
        pixels[at] = rows === 0 ? 0
          : scene.table[placeOf(factor * Math.log(this.sums[column * record.beams + beam] / rows), limits)];
      }
    }
    this.cells.commit();
  }

  /** Sum rows into columns. @param {RecordStore} record @param {number} first number of column 0 @param {number} stepMs */
  gather(record, first, stepMs) {
    const { beams } = record;
    const scale = Math.LN10 / 10;
    for (let i = record.rows - 1; i >= 0; i--) {
      const row = record.placeOf(i);
      const column = Math.floor(record.tMs[row] / stepMs) - first;
      if (column < 0) break;
      this.maps[column]++;
      const [to, from] = [column * beams, row * beams];
      for (let beam = 0; beam < beams; beam++) this.sums[to + beam] += Math.exp(record.levelDb[from + beam] * scale);
    }
  }

  /** A row lasts half a second: columns narrower than that take the row before. @param {number} columns @param {number} stepMs */
  spread(columns, stepMs) {
    const reach = Math.ceil(600 / stepMs);
    const beams = this.sums.length / columns;
    let next = Infinity; // the nearest column to the right that has rows of its own
    for (let column = columns - 1; column >= 0; column--) {
      if (this.maps[column] > 0) next = column;
      else if (next - column <= reach) {
        this.maps[column] = this.maps[next];
        this.sums.copyWithin(column * beams, next * beams, (next + 1) * beams);
      }
    }
  }
}

/** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {{low: number, high: number}} range */
function drawHoles(ctx, plot, scene, range) {
  let free = -Infinity;
  for (const hole of scene.record.holes) {
    if (hole.tEndMs < range.low) continue;
    const x0 = place(range, plot.left, plot.width, hole.tMs);
    const x1 = Math.max(place(range, plot.left, plot.width, hole.tEndMs), x0 + 2);
    const middle = (x0 + x1) / 2;
    ctx.fillStyle = "#000000";
    ctx.fillRect(x0 - 1, plot.top, x1 - x0 + 2, plot.height);
    unknown(ctx, scene.look, { left: x0, top: plot.top, width: x1 - x0, height: plot.height });
    ctx.fillStyle = scene.look.palette.text;
    for (const x of [x0 - 1, x1]) ctx.fillRect(x, plot.top, 1, plot.height);
    if (middle > free) {
      label(ctx, scene.look, hole.why, Math.min(middle + 3, plot.left + plot.width - 60), plot.top + 4);
      free = middle + 3 + ctx.measureText(hole.why).width + 12;
    }
  }
}

/** @param {CanvasRenderingContext2D} ctx @param {Plot} plot @param {Scene} scene @param {{low: number, high: number}} range */
function timeAxis(ctx, plot, scene, range) {
  const { look } = scene;
  const most = Math.max(2, plot.width / (look.small * 4.5));
  const bottom = plot.top + plot.height;
  ctx.fillStyle = look.palette.text;
  ctx.strokeStyle = look.palette.text;
  ctx.textAlign = "center";
  ctx.textBaseline = "top";
  ctx.beginPath();
  for (const t of timeTicks(range.low, range.high, most)) {
    const x = Math.round(place(range, plot.left, plot.width, t)) + 0.5;
    ctx.moveTo(x, bottom);
    ctx.lineTo(x, bottom + 4);
    const half = ctx.measureText("00:00").width / 2;
    if (x < plot.left + plot.width - half) ctx.fillText(clock(t, scene.recordSpanS <= 120), x, bottom + 5);
  }
  ctx.stroke();
  const minutes = Math.round(scene.recordSpanS / 60);
  ctx.fillText(`data time, UTC; ${minutes} min to now`, plot.left + plot.width / 2, bottom + 6 + look.small);
}
