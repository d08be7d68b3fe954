// @ts-check
/** The only file that touches the document. Writes only what has changed. */
import { Surface } from "./surface.js";

/** @typedef {import("./keys.js").Action} Action @typedef {import("./palettes.js").Palette} Palette */
/** @typedef {import("./attention.js").Item} Item */

export const CANVASES = /** @type {const} */ (["record", "map", "response", "spectrum", "scale", "strip", "tick"]);
/** @typedef {typeof CANVASES[number]} CanvasName */

export class Page {
  /** @param {Document} document */
  constructor(document) {
    this.document = document;
    this.window = /** @type {Window & typeof globalThis} */ (document.defaultView);
    /** @type {Record<CanvasName, Surface>} */
    this.surfaces = /** @type {any} */ ({});
    for (const name of CANVASES) this.surfaces[name] = new Surface(/** @type {HTMLCanvasElement} */ (this.element(name)));
    /** @type {Map<string, HTMLElement[]>} */
    this.buttons = new Map();
    this.help = /** @type {HTMLDialogElement} */ (this.element("help"));
    this.ending = new AbortController();
  }

  /** @param {string} id @returns {HTMLElement} */
  element(id) {
    const found = this.document.getElementById(id);
    if (found === null) throw new Error(`the page has no element "${id}"`);
    return found;
  }

  /** @param {string} id @param {string} text */
  text(id, text) {
    const element = this.element(id);
    if (element.textContent !== text) element.textContent = text;
  }

  /** A text whose looks say what it is worth. @param {string} id @param {string} text
   * @param {"" | "caution" | "wrong"} kind @param {boolean} [hidden] */
  mark(id, text, kind, hidden = false) {
    this.text(id, text);
    const element = this.element(id);
    if (element.dataset.kind !== kind) element.dataset.kind = kind;
    if (element.hidden !== hidden) element.hidden = hidden;
  }

  /** Names and values. @param {string} id @param {[string, string][]} pairs */
  pairs(id, pairs) {
    const list = this.element(id);
    while (list.children.length > 2 * pairs.length) list.lastElementChild?.remove();
    pairs.forEach(([name, value], i) => {
      if (list.children.length <= 2 * i) {
        list.append(this.document.createElement("dt"), this.document.createElement("dd"));
      }
      const [dt, dd] = [list.children[2 * i], list.children[2 * i + 1]];
      if (dt.textContent !== name) dt.textContent = name;
      if (dd.textContent !== value) dd.textContent = value;
    });
  }

  /** @param {Item[]} items @param {number} most */
  attention(items, most) {
    const list = this.element("attention");
    const lines = items.slice(0, most).map((item) => `${item.kind === "wrong" ? "✕" : "■"} ${item.text}`);
    if (items.length > most) lines[most - 1] = `${lines[most - 1]} (and ${items.length - most} more)`;
    if (lines.length === 0) lines.push("Nothing is out of order.");
    const key = lines.join("\n");
    if (list.dataset.key === key) return;
    list.dataset.key = key;
    list.replaceChildren(...lines.map((line, i) => {
      const element = this.document.createElement("li");
      element.textContent = line;
      element.dataset.kind = items[i]?.kind ?? "";
      return element;
    }));
  }

  /** Buttons of actions, and the list of keys. @param {Action[]} actions @param {(action: Action, big: boolean) => void} run */
  actions(actions, run) {
    const keys = this.element("keys");
    keys.replaceChildren();
    this.element("controls").replaceChildren();
    this.element("limits").replaceChildren();
    this.buttons.clear();
    for (const action of actions) {
      const row = this.document.createElement("div");
      const key = this.document.createElement("kbd");
      key.textContent = action.shown;
      row.append(key, ` ${action.text}`);
      keys.append(row);
      if (action.button === undefined) continue;
      const button = this.document.createElement("button");
      button.type = "button";
      button.id = `do-${action.id}`;
      button.title = `${action.text} (${action.shown})`;
      button.append(this.document.createElement("span"), " ", this.document.createElement("kbd"));
      /** @type {HTMLElement} */ (button.lastElementChild).textContent = action.shown;
      button.addEventListener("click", (event) => run(action, event.shiftKey));
      this.element(action.id.startsWith("limit") ? "limits" : "controls").append(button);
      this.buttons.set(action.id, [button]);
      this.button(action.id, action.button, false);
    }
  }

  /** @param {string} id @param {string} text @param {boolean} chosen */
  button(id, text, chosen) {
    for (const button of this.buttons.get(id) ?? []) {
      const span = /** @type {HTMLElement} */ (button.firstElementChild);
      if (span.textContent !== text) span.textContent = text;
      const pressed = String(chosen);
      if (button.getAttribute("aria-pressed") !== pressed) button.setAttribute("aria-pressed", pressed);
    }
  }

  /** @param {Palette} palette @param {{small: number, body: number, large: number}} sizes */
  dress(palette, sizes) {
    const { style } = this.document.documentElement;
    for (const [key, value] of Object.entries(palette)) {
      if (typeof value === "string") style.setProperty(`--${key}`, value);
    }
    for (const [key, value] of Object.entries(sizes)) style.setProperty(`--${key}`, `${value}px`);
  }

  /** Sizes of all canvases, now and when they change. @param {(name: CanvasName) => void} changed */
  watchSizes(changed) {
    const fit = (/** @type {CanvasName} */ name) => {
      const box = this.surfaces[name].canvas.getBoundingClientRect();
      this.surfaces[name].fit(box.width, box.height, this.window.devicePixelRatio);
      changed(name);
    };
    const observer = new ResizeObserver((entries) => {
      for (const entry of entries) fit(/** @type {CanvasName} */ (entry.target.id));
    });
    for (const name of CANVASES) {
      observer.observe(this.surfaces[name].canvas);
      fit(name);
    }
    this.ending.signal.addEventListener("abort", () => observer.disconnect());
  }

  /** @param {CanvasName} name @param {keyof HTMLElementEventMap} kind
   * @param {(x: number, y: number, event: any) => void} take CSS pixels from the canvas's corner */
  onPointer(name, kind, take) {
    const { canvas } = this.surfaces[name];
    const listener = (/** @type {any} */ event) => {
      const box = canvas.getBoundingClientRect();
      take(event.clientX - box.left, event.clientY - box.top, event);
    };
    canvas.addEventListener(kind, listener, { signal: this.ending.signal, passive: false });
  }

  /** @param {(event: KeyboardEvent) => void} take */
  onKey(take) {
    this.document.addEventListener("keydown", take, { signal: this.ending.signal });
  }

  /** @param {() => void} take */
  onVisible(take) {
    this.document.addEventListener("visibilitychange", take, { signal: this.ending.signal });
  }

  get hidden() {
    return this.document.hidden;
  }

  toggleHelp() {
    if (this.help.open) this.help.close();
    else this.help.showModal();
  }

  destroy() {
    this.ending.abort();
  }
}
