// @ts-check
/** Axes, grids and marks that all plots have in common. */
import { angleTicks, place, rowOf, ticks } from "./scale.js";
import { age } from "./wording.js";

/** @typedef {import("./types.js").Plot} Plot @typedef {import("./types.js").Range} Range */
/** @typedef {import("./palettes.js").Palette} Palette */
/** @typedef {import("./freshness.js").Freshness} Freshness */

/**
 * @typedef {object} Look
 * @property {Palette} palette
 * @property {number} small size of axis labels, CSS pixels
 * @property {number} body
 * @property {number} large
 */

export const FACE = "system-ui, 'DejaVu Sans', 'Liberation Sans', sans-serif";

/** @param {CanvasRenderingContext2D} ctx @param {Look} look @param {number} width @param {number} height */
export function clear(ctx, look, width, height) {
  ctx.globalAlpha = 1;
  ctx.fillStyle = look.palette.plate;
  ctx.fillRect(0, 0, width, height);
  ctx.font = `${look.small}px ${FACE}`;
  ctx.setLineDash([]);
  ctx.lineWidth = 1;
}

/** Hatching where nothing is known. @param {CanvasRenderingContext2D} ctx @param {Look} look @param {Plot} plot */
export function unknown(ctx, look, plot) {
  ctx.save();
  ctx.beginPath();
  ctx.rect(plot.left, plot.top, plot.width, plot.height);
  ctx.clip();
  ctx.fillStyle = look.palette.page;
  ctx.fillRect(plot.left, plot.top, plot.width, plot.height);
  ctx.strokeStyle = look.palette.faint;
  ctx.beginPath();
  for (let x = plot.left - plot.height; x < plot.left + plot.width; x += 14) {
    ctx.moveTo(x, plot.top + plot.height);
    ctx.lineTo(x + plot.height, plot.top);
  }
  ctx.stroke();
  ctx.restore();
}

/** @param {CanvasRenderingContext2D} ctx @param {Look} look @param {Plot} plot @param {string} [title] */
export function bearingAxis(ctx, look, plot, title = "cone angle") {
  ctx.fillStyle = look.palette.text;
  ctx.strokeStyle = look.palette.text;
  ctx.textAlign = "right";
  ctx.textBaseline = "middle";
  ctx.beginPath();
  for (const angle of angleTicks(plot, look.small)) {
    const y = Math.round(rowOf(plot, Math.cos((angle * Math.PI) / 180))) + 0.5;
    ctx.moveTo(plot.left - 4, y);
    ctx.lineTo(plot.left, y);
    ctx.fillText(`${angle}°`, plot.left - 6, y);
  }
  ctx.stroke();
  sideways(ctx, title, look.small * 0.7, plot.top + plot.height / 2);
}

/** @param {CanvasRenderingContext2D} ctx @param {string} text @param {number} x @param {number} y */
export function sideways(ctx, text, x, y) {
  ctx.save();
  ctx.translate(x, y);
  ctx.rotate(-Math.PI / 2);
  ctx.textAlign = "center";
  ctx.textBaseline = "middle";
  ctx.fillText(text, 0, 0);
  ctx.restore();
}

/**
 * Ticks below a plot. @param {CanvasRenderingContext2D} ctx @param {Look} look @param {Plot} plot @param {Range} range
 * @param {(value: number) => string} label @param {string} title
 */
export function lowerAxis(ctx, look, plot, range, label, title) {
  const bottom = plot.top + plot.height;
  ctx.fillStyle = look.palette.text;
  ctx.strokeStyle = look.palette.text;
  ctx.textAlign = "center";
  ctx.textBaseline = "top";
  ctx.beginPath();
  for (const value of ticks(range, Math.max(2, plot.width / (look.small * 5)))) {
    const x = Math.round(place(range, plot.left, plot.width, value)) + 0.5;
    ctx.moveTo(x, bottom);
    ctx.lineTo(x, bottom + 4);
    const text = label(value);
    const half = ctx.measureText(text).width / 2;
    ctx.fillText(text, Math.min(Math.max(x, plot.left + half - 8), plot.left + plot.width - half + 6), bottom + 5);
  }
  ctx.stroke();
  ctx.fillText(title, plot.left + plot.width / 2, bottom + 6 + look.small);
}

/** @param {CanvasRenderingContext2D} ctx @param {Look} look @param {Plot} plot */
export function border(ctx, look, plot) {
  ctx.strokeStyle = look.palette.faint;
  ctx.strokeRect(plot.left + 0.5, plot.top + 0.5, plot.width - 1, plot.height - 1);
}

/**
 * A line that is seen on any colour: dark under light. @param {CanvasRenderingContext2D} ctx @param {number} x0
 * @param {number} y0 @param {number} x1 @param {number} y1 @param {Look} look @param {number[]} [dash]
 */
export function visible(ctx, x0, y0, x1, y1, look, dash = []) {
  for (const [colour, width] of /** @type {[string, number][]} */ ([["#000000", 3], [look.palette.page === "#000000"
    ? look.palette.text : "#e8eef2", 1.2]])) {
    ctx.strokeStyle = colour;
    ctx.lineWidth = width;
    ctx.setLineDash(dash);
    ctx.beginPath();
    ctx.moveTo(x0, y0);
    ctx.lineTo(x1, y1);
    ctx.stroke();
  }
  ctx.setLineDash([]);
  ctx.lineWidth = 1;
}

/** A short text on a plate of its own. @param {CanvasRenderingContext2D} ctx @param {Look} look @param {string} text
 * @param {number} x left @param {number} y top @param {"plain" | "caution" | "wrong"} [kind] */
export function label(ctx, look, text, x, y, kind = "plain") {
  const { palette } = look;
  ctx.fillStyle = kind === "plain" ? palette.plate : kind === "wrong" ? palette.wrongPlate : palette.cautionPlate;
  ctx.fillRect(x, y, ctx.measureText(text).width + 8, look.small + 6);
  ctx.fillStyle = kind === "plain" ? palette.text : kind === "wrong" ? palette.wrongText : palette.cautionText;
  ctx.textAlign = "left";
  ctx.textBaseline = "top";
  ctx.fillText(text, x + 4, y + 3);
}

/**
 * What an old picture looks like: marked, then covered.
 * @param {CanvasRenderingContext2D} ctx @param {Look} look @param {Plot} plot @param {Freshness} state @param {number} ageS
 */
export function staleMark(ctx, look, plot, state, ageS) {
  if (state === "none") {
    unknown(ctx, look, plot);
    label(ctx, look, "no data yet", plot.left + 10, plot.top + 10);
  } else if (state === "covered") {
    ctx.globalAlpha = 0.8;
    unknown(ctx, look, plot);
    ctx.globalAlpha = 1;
    ctx.font = `bold ${Math.round(look.large * (plot.width > 320 ? 1.6 : 1))}px ${FACE}`;
    const text = `STALE ${age(ageS)}`;
    const [w, h] = [ctx.measureText(text).width + 24, look.large * 2.4];
    const [x, y] = [plot.left + (plot.width - w) / 2, plot.top + (plot.height - h) / 2];
    ctx.fillStyle = look.palette.wrongPlate;
    ctx.fillRect(x, y, w, h);
    ctx.fillStyle = look.palette.wrongText;
    ctx.textAlign = "center";
    ctx.textBaseline = "middle";
    ctx.fillText(text, x + w / 2, y + h / 2);
    ctx.font = `${look.small}px ${FACE}`;
  } else if (state === "stale") label(ctx, look, `■ STALE ${age(ageS)}`, plot.left + 8, plot.top + 8, "caution");
}
