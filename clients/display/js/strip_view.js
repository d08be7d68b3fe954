// @ts-check
/** The hydrophones, forward to aft: state by shape and letter; colour says nothing that they do not. */
import { clear, FACE } from "./axes.js";

/** @typedef {import("./scene.js").Scene} Scene @typedef {import("./surface.js").Surface} Surface */

/** Letter of each state; a good one is a full bar, one not judged an empty one. @type {Record<string, string>} */
const LETTERS = {
  dead: "D", excluded: "X", clipped: "C", exchanged: "E", reversed: "R", noisy: "N", intermittent: "I", weak: "W",
};

export class StripView {
  /** @param {Surface} surface @param {Scene} scene */
  draw(surface, scene) {
    const { ctx } = surface;
    const { look, health } = scene;
    clear(ctx, look, surface.width, surface.height);
    if (health === null || health.channels.length === 0) {
      ctx.fillStyle = look.palette.text;
      ctx.textBaseline = "middle";
      ctx.fillText("not judged yet", 6, surface.height / 2);
      return;
    }
    const count = health.channels.length;
    const step = (surface.width - 4) / count;
    const height = surface.height - look.small - 8;
    const band = new Set(scene.band?.channels ?? []);
    health.channels.forEach((channel, i) => {
      const x = 2 + i * step;
      const w = Math.max(1, step - (step > 4 ? 2 : 0.5));
      glyph(ctx, look, channel.state, x, 3, w, height, band.has(channel.i));
    });
    ctx.fillStyle = look.palette.text;
    ctx.textBaseline = "bottom";
    const every = [1, 2, 4, 5, 8, 10, 16, 20, 50, 100].find((n) => n * step >= look.small * 2.2) ?? 200;
    ctx.textAlign = "center";
    for (let i = 0; i < count; i += every) ctx.fillText(String(health.channels[i].i), 2 + (i + 0.5) * step, surface.height);
    surface.tell({ channels: count, used: health.used });
  }
}

/** @param {CanvasRenderingContext2D} ctx @param {import("./axes.js").Look} look @param {string} state @param {number} x
 * @param {number} y @param {number} w @param {number} h @param {boolean} inBand */
function glyph(ctx, look, state, x, y, w, h, inBand) {
  const { palette } = look;
  ctx.strokeStyle = palette.text;
  ctx.fillStyle = palette.text;
  if (state === "good") {
    const top = inBand ? y : y + h * 0.55; // half as high: not of this band
    ctx.globalAlpha = 0.5;
    ctx.fillRect(x, top, w, y + h - top);
    ctx.globalAlpha = 1;
    return;
  }
  if (state === "not judged") {
    ctx.setLineDash([2, 2]);
    ctx.strokeRect(x + 0.5, y + 0.5, Math.max(1, w - 1), h - 1);
    ctx.setLineDash([]);
    return;
  }
  ctx.fillStyle = palette.cautionPlate;
  ctx.fillRect(x, y, w, h);
  ctx.strokeRect(x + 0.5, y + 0.5, Math.max(1, w - 1), h - 1);
  if (state === "dead" || state === "excluded") {
    ctx.strokeStyle = palette.cautionText;
    ctx.beginPath();
    ctx.moveTo(x, y + h);
    ctx.lineTo(x + w, y);
    if (state === "dead") {
      ctx.moveTo(x, y);
      ctx.lineTo(x + w, y + h);
    }
    ctx.stroke();
  }
  if (w >= 7) {
    const size = Math.min(look.small, w + 3);
    ctx.font = `bold ${size}px ${FACE}`;
    ctx.fillStyle = palette.cautionPlate;
    ctx.fillRect(x + 1, y + h / 2 - size / 2, w - 2, size);
    ctx.fillStyle = palette.cautionText;
    ctx.textAlign = "center";
    ctx.textBaseline = "middle";
    ctx.fillText(LETTERS[state] ?? "?", x + w / 2, y + h / 2 + 1);
    ctx.font = `${look.small}px ${FACE}`;
  }
}

/** In words: who is not good, and why. @param {import("./types.js").Health | null} health @returns {string} */
export function stripText(health) {
  if (health === null) return "";
  const bad = health.channels.filter((c) => c.state !== "good" && c.state !== "not judged");
  if (bad.length === 0) return health.channels.some((c) => c.state === "good") ? "all good" : "not judged yet";
  const shown = bad.slice(0, 6).map((c) => `${c.i} ${LETTERS[c.state] ?? "?"} ${c.state}`);
  return shown.join(", ") + (bad.length > 6 ? ` and ${bad.length - 6} more` : "");
}
