// @ts-check
/** A hand that data time moves, once round in ten seconds: when it stands still, so does the data. */
import { clear } from "./axes.js";

/** @param {import("./surface.js").Surface} surface @param {import("./scene.js").Scene} scene */
export function drawTick(surface, scene) {
  const { ctx, width, height } = surface;
  clear(ctx, scene.look, width, height);
  ctx.fillStyle = scene.look.palette.page;
  ctx.fillRect(0, 0, width, height);
  const [x, y, r] = [width / 2, height / 2, Math.min(width, height) / 2 - 2];
  ctx.strokeStyle = scene.look.palette.faint;
  ctx.beginPath();
  ctx.arc(x, y, r, 0, 2 * Math.PI);
  ctx.stroke();
  if (scene.map === null) return;
  const turn = ((scene.map.tEndMs % 10_000) / 10_000) * 2 * Math.PI;
  ctx.strokeStyle = scene.look.palette.text;
  ctx.lineWidth = 2.5;
  ctx.beginPath();
  ctx.moveTo(x, y);
  ctx.lineTo(x + r * Math.sin(turn), y - r * Math.cos(turn));
  ctx.stroke();
}
