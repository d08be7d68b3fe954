// @ts-check
/** A canvas that draws in CSS pixels; the one place that knows the device-pixel ratio. */

export class Surface {
  /** @param {HTMLCanvasElement} canvas */
  constructor(canvas) {
    this.canvas = canvas;
    this.width = 0;
    this.height = 0;
    this.dirty = true;
    this.ctx = /** @type {CanvasRenderingContext2D} */ (canvas.getContext("2d", { alpha: false }));
  }

  /** @param {number} width @param {number} height CSS pixels @param {number} ratio device pixels of one */
  fit(width, height, ratio) {
    const [w, h] = [Math.max(1, Math.round(width * ratio)), Math.max(1, Math.round(height * ratio))];
    if (this.canvas.width !== w || this.canvas.height !== h) {
      this.canvas.width = w;
      this.canvas.height = h;
    }
    [this.width, this.height] = [width, height];
    this.ctx.setTransform(ratio, 0, 0, ratio, 0, 0);
    this.dirty = true;
  }

  /** Tell what is drawn where, for programs that look at the page. @param {Record<string, string | number>} facts */
  tell(facts) {
    for (const [key, value] of Object.entries(facts)) {
      const text = typeof value === "number" ? String(Math.round(value * 1000) / 1000) : value;
      if (this.canvas.dataset[key] !== text) this.canvas.dataset[key] = text;
    }
  }
}

/** Cells of colour, one pixel each, drawn larger. */
export class Cells {
  constructor() {
    this.canvas = new OffscreenCanvas(1, 1);
    this.ctx = /** @type {OffscreenCanvasRenderingContext2D} */ (this.canvas.getContext("2d"));
    this.image = this.ctx.createImageData(1, 1);
    this.pixels = new Uint32Array(this.image.data.buffer);
  }

  /** @param {number} columns @param {number} rows */
  resize(columns, rows) {
    if (this.canvas.width === columns && this.canvas.height === rows) return;
    [this.canvas.width, this.canvas.height] = [columns, rows];
    this.image = this.ctx.createImageData(columns, rows);
    this.pixels = new Uint32Array(this.image.data.buffer);
  }

  /** Take over `pixels`. */
  commit() {
    this.ctx.putImageData(this.image, 0, 0);
  }

  /** @param {CanvasRenderingContext2D} ctx @param {number} x @param {number} y @param {number} w @param {number} h */
  draw(ctx, x, y, w, h) {
    ctx.imageSmoothingEnabled = false;
    ctx.drawImage(this.canvas, x, y, w, h);
  }
}
