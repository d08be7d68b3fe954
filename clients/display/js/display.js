// @ts-check
/** The display as an object: what it knows, what is chosen, and when it draws. */
import { actionsOf } from "./actions.js";
import { fetchArray, fetchHistory } from "./api.js";
import { attention } from "./attention.js";
import { lineOf } from "./beams.js";
import { readChoices, writeChoices } from "./choices.js";
import { CANVASES } from "./dom.js";
import { Age } from "./freshness.js";
import { actionFor } from "./keys.js";
import { SlowLimits, wanted, wantedOfRecord } from "./levels.js";
import { Link } from "./link.js";
import { looksOf } from "./looks.js";
import { MapView } from "./map_view.js";
import { outstanding } from "./readout.js";
import { RecordStore } from "./record.js";
import { RecordView } from "./record_view.js";
import { mapRequest, STATES_ONLY } from "./request.js";
import { ResponseView } from "./response_view.js";
import { ScaleView } from "./scale_view.js";
import { SpectrumView } from "./spectrum_view.js";
import { StripView } from "./strip_view.js";
import { drawTick } from "./tick_view.js";
import { followPointer } from "./pointer.js";
import { showChoices, showCursor, showState } from "./state_text.js";
import { panned, zoomed } from "./zoom.js";

/** @typedef {import("./types.js").LiveMap} LiveMap @typedef {import("./types.js").Range} Range */
/** @typedef {import("./choices.js").Choices} Choices @typedef {import("./dom.js").CanvasName} CanvasName */
/** @typedef {import("./scene.js").Scene} Scene */

/** Digits that change more often than every two seconds cannot be read (MSC/Circ.982 5.6). */
const DIGITS_MS = 2000;
const RECORD_MS = 1000;
const CHECK_MS = 250;

export class Display {
  /** @param {import("./dom.js").Page} page @param {Storage} storage @param {string} liveAddress */
  constructor(page, storage, liveAddress) {
    this.page = page;
    this.storage = storage;
    this.choices = readChoices(storage);
    this.link = new Link(liveAddress, {
      onHello: (hello) => this.greeted(hello), onMap: (map) => this.takeMap(map),
      onState: (topic, message) => this.takeState(topic, message), onLink: () => this.linkChanged(),
    });
    this.views = { map: new MapView(), record: new RecordView(), response: new ResponseView(),
      spectrum: new SpectrumView(), scale: new ScaleView(), strip: new StripView(), tick: { draw: drawTick } };
    this.age = new Age();
    this.limits = new SlowLimits();
    this.recordLimits = new SlowLimits();
    this.record = new RecordStore();
    /** @type {import("./types.js").ArrayInfo | null} */
    this.array = null;
    /** @type {import("./types.js").ArrayBand | null} */
    this.band = null;
    /** @type {import("./beams.js").Line | null} */
    this.line = null;
    /** @type {LiveMap | null} */
    this.map = null;
    /** @type {Range | null} frequencies chosen; null: the whole band */
    this.zoomed = null;
    /** @type {import("./types.js").Cursor | null} */
    this.cursor = null;
    this.pinned = false;
    /** @type {import("./types.js").Health | null} */
    this.health = null;
    /** @type {import("./types.js").Status | null} */
    this.status = null;
    /** @type {number[][]} */
    this.rangesHz = [];
    /** @type {string | null} place in the service's record */
    this.place = null;
    this.version = "";
    this.newer = false;
    this.shownMs = -Infinity;
    this.frame = 0;
    this.lastState = "none";
    this.asked = "";
    this.fetching = false;
    this.arrayMs = -Infinity;
    this.started = "";
    /** @type {import("./keys.js").Action[]} */
    this.actions = [];
    this.maps = 0;
    this.skipped = 0;
    /** @type {number[]} */
    this.timers = [];
    /** @type {Uint32Array} */
    this.table = new Uint32Array(257);
    this.tableName = "";
    this.look = this.dress();
  }

  /** Begin: size, keys, timers; then array, record and live socket. */
  start() {
    this.page.watchSizes((name) => {
      this.draw(name);
      if (name === "map") this.ask();
    });
    this.page.onKey((event) => this.key(event));
    this.page.onVisible(() => this.visible());
    followPointer(this);
    this.listActions();
    this.timers.push(setInterval(() => this.check(), CHECK_MS), setInterval(() => void this.fetchRecord(), RECORD_MS));
    void this.begin();
  }

  destroy() {
    this.timers.forEach(clearInterval);
    cancelAnimationFrame(this.frame);
    this.link.destroy();
    this.page.destroy();
  }

  async begin() {
    while (!(await this.learnArray())) {
      this.showDigits();
      await new Promise((resolve) => setTimeout(resolve, 1000));
    }
    await this.fetchRecord();
    this.link.open();
  }

  /** @returns {Promise<boolean>} whether the array is known */
  async learnArray() {
    const array = await fetchArray();
    if (array === null || array.bands.length === 0) return false;
    this.array = array;
    this.arrayMs = performance.now();
    const band = array.bands.find((b) => b.name === this.choices.band) ?? array.bands[0];
    const same = this.band?.name === band.name;
    this.band = band;
    this.line = lineOf(array, band);
    if (!same) this.forget();
    this.listActions();
    this.draw();
    return true;
  }

  /** Another band: nothing of it has been seen. */
  forget() {
    this.map = null;
    this.zoomed = null;
    this.place = null;
    this.record.clear();
    this.rangesHz = [];
    this.age.reset();
    this.limits.reset();
    this.recordLimits.reset();
    if (this.cursor !== null) this.cursor = { ...this.cursor, hz: this.within(this.cursor.hz) };
    this.asked = "";
  }

  listActions() {
    this.actions = actionsOf(this);
    this.page.actions(this.actions, (action, big) => action.run(big));
    showChoices(this);
  }

  // ---- what comes

  /** @param {Record<string, any>} hello */
  greeted(hello) {
    this.newer = this.version !== "" && hello.version !== this.version;
    if (this.version === "") this.version = String(hello.version);
    if (this.started !== "" && String(hello.service_start_time) !== this.started) void this.learnArray();
    this.started = String(hello.service_start_time);
    this.asked = "";
    this.ask();
    void this.fetchRecord();
  }

  /** @param {LiveMap} map */
  takeMap(map) {
    if (map.band !== this.band?.name) return;
    this.maps++;
    this.skipped += map.skipped;
    this.age.take(map.tEndMs, performance.now() / 1000);
    const changed = this.map === null || map.limits.channels_used !== this.map.limits.channels_used;
    if (changed && this.map !== null && performance.now() - this.arrayMs > 2000) void this.learnArray();
    const first = this.map === null;
    this.map = map;
    if (this.choices.auto) this.limits.take(wanted(map), map.tEndMs);
    if (this.cursor === null) this.cursor = outstanding(map, this.range);
    this.draw("map", "spectrum", "response", "tick", "scale");
    if (first) this.showDigits();
  }

  /** @param {string} topic @param {any} message */
  takeState(topic, message) {
    if (topic === "health") {
      this.health = message;
      this.draw("strip");
    } else if (topic === "status") this.status = message;
  }

  linkChanged() {
    this.showDigits();
  }

  async fetchRecord() {
    if (this.fetching || this.band === null || this.page.hidden) return;
    this.fetching = true;
    const [band, part, place] = [this.band.name, this.choices.part, this.place];
    const answer = await fetchHistory(band, part, place);
    this.fetching = false;
    if (answer === null || band !== this.band.name || part !== this.choices.part || place !== this.place) return;
    const known = this.rangesHz.length;
    this.rangesHz = answer.rangesHz;
    this.place = answer.next;
    this.record.take(answer);
    if (answer.newestAgeS !== null && answer.tMs.length > 0 && this.map === null) {
      this.age.take(this.record.newestMs, performance.now() / 1000, answer.newestAgeS);
    } else if (answer.newestAgeS !== null && this.map !== null && answer.newestAgeS > 2) {
      this.age.take(this.map.tEndMs, performance.now() / 1000, answer.newestAgeS);
    }
    if (this.record.rows > 0) this.recordLimits.take(wantedOfRecord(this.record), this.record.newestMs);
    if (known !== answer.rangesHz.length) showChoices(this);
    this.draw("record");
  }

  /** Ask for maps as they are drawn, and for states; a hidden page asks for states alone. */
  ask() {
    if (this.band === null) return;
    const { map } = this.page.surfaces;
    const plot = MapView.plot(map, this.look.small);
    const ratio = map.canvas.width / Math.max(1, map.width);
    const pixels = { columns: Math.round(plot.width * ratio), rows: Math.round(plot.height * ratio) };
    const request = this.page.hidden ? STATES_ONLY : mapRequest(this.band, pixels, this.zoomed);
    const text = JSON.stringify(request);
    if (text === this.asked) return;
    this.asked = text;
    this.link.ask(request);
  }

  visible() {
    this.ask();
    if (!this.page.hidden) void this.fetchRecord();
    this.draw();
  }

  // ---- what is chosen

  /** @param {Partial<Choices>} change */
  choose(change) {
    Object.assign(this.choices, change);
    writeChoices(this.storage, this.choices);
    this.look = this.dress();
    showChoices(this);
    this.draw();
    this.ask();
  }

  /** @param {string} name */
  chooseBand(name) {
    this.choose({ band: name, part: null });
    void this.learnArray().then(() => {
      this.ask();
      void this.fetchRecord();
      this.showDigits();
    });
  }

  /** @param {number} by */
  choosePart(by) {
    const all = [null, ...this.rangesHz.map((_, i) => i)];
    const at = Math.max(0, all.indexOf(this.choices.part));
    this.choose({ part: all[(at + by + all.length) % all.length] });
    this.place = null;
    this.record.clear();
    this.recordLimits.reset();
    void this.fetchRecord();
  }

  /** @param {Partial<Choices>} change of auto, low, high */
  setLimits(change) {
    const { low, high } = this.shownLimits;
    this.choose({ low, high, ...change });
    if (this.choices.auto) this.limits.reset();
  }

  /** @param {number} low @param {number} high dB to add */
  shiftLimits(low, high) {
    const now = this.shownLimits;
    const moved = { low: now.low + low, high: now.high + high };
    if (moved.high - moved.low >= 5) this.setLimits({ auto: false, ...moved });
  }

  get shownLimits() {
    return this.choices.auto ? this.limits.shown : { low: this.choices.low, high: this.choices.high };
  }

  /** @returns {Range} of the band, Hz */
  get whole() {
    const [low, high] = this.band?.band_hz ?? [0, 1];
    return { low, high };
  }

  /** @returns {Range} frequencies shown, Hz */
  get range() {
    return this.zoomed ?? this.whole;
  }

  /** @param {number} hz */
  within(hz) {
    return Math.max(this.whole.low, Math.min(this.whole.high, hz));
  }

  /** @param {number} factor of the span; Infinity: the whole band @param {number} [about] Hz */
  zoom(factor, about = this.cursor?.hz) {
    this.zoomed = zoomed(this.range, this.whole, factor, about);
    this.zoomChanged();
  }

  /** @param {number} share of the span */
  pan(share) {
    if (this.zoomed === null) return;
    this.zoomed = panned(this.zoomed, this.whole, share);
    this.zoomChanged();
  }

  zoomChanged() {
    showChoices(this);
    this.draw();
    this.ask();
  }

  // ---- the pointer

  /** @param {Partial<import("./types.js").Cursor>} to */
  point(to) {
    const from = this.cursor ?? { cos: 0, hz: (this.range.low + this.range.high) / 2 };
    this.cursor = { cos: Math.max(-1, Math.min(1, to.cos ?? from.cos)), hz: this.within(to.hz ?? from.hz) };
    showCursor(this);
    this.draw("map", "record", "response", "spectrum");
  }

  /** @param {boolean} pinned */
  pin(pinned) {
    this.pinned = pinned;
    showChoices(this);
    showCursor(this);
  }

  /** @param {KeyboardEvent} event */
  key(event) {
    if (this.page.help.open && event.key !== "?") return;
    const action = actionFor(this.actions, event, this.choices.keys);
    if (action === null) return;
    event.preventDefault();
    action.run(event.shiftKey);
  }

  // ---- showing

  dress() {
    const { look, palette, sizes, table, tableName } = looksOf(this.choices);
    this.page.dress(palette, sizes);
    [this.table, this.tableName] = [table, tableName];
    return look;
  }

  /** Mark what is to be drawn with the next frame of the screen. @param {...CanvasName} names all, if none */
  draw(...names) {
    for (const name of names.length === 0 ? CANVASES : names) this.page.surfaces[name].dirty = true;
    if (this.frame === 0) this.frame = requestAnimationFrame(() => this.drawNow());
  }

  drawNow() {
    this.frame = 0;
    const scene = this.scene();
    for (const name of CANVASES) {
      const surface = this.page.surfaces[name];
      if (!surface.dirty || surface.width === 0) continue;
      surface.dirty = false;
      this.views[name].draw(surface, scene);
    }
  }

  /** @returns {Scene} */
  scene() {
    const nowS = performance.now() / 1000;
    return {
      look: this.look, array: this.array, band: this.band, line: this.line, map: this.map, range: this.range,
      limits: this.shownLimits, table: this.table, tableName: this.tableName, cursor: this.cursor, record: this.record,
      recordLimits: this.choices.auto ? this.recordLimits.shown : this.shownLimits, recordSpanS: this.choices.spanS,
      health: this.health, freshness: this.age.state(nowS), ageS: this.age.seconds(nowS),
    };
  }

  /** Four times a second: is the data still new, does the link live; texts when it is time. */
  check() {
    this.link.check(performance.now());
    const state = this.age.state(performance.now() / 1000);
    const due = performance.now() - this.shownMs >= DIGITS_MS;
    if (state !== this.lastState || due) {
      if (state !== "fresh" || state !== this.lastState) this.draw("map", "response", "spectrum");
      this.lastState = state;
      this.showDigits();
    }
  }

  showDigits() {
    this.shownMs = performance.now();
    showState(this);
    showCursor(this);
    const nowS = performance.now() / 1000;
    this.page.attention(attention({ link: this.link.state, status: this.status, health: this.health, map: this.map,
      freshness: this.age.state(nowS), ageS: this.age.seconds(nowS), calibrated: this.array?.calibrated ?? true, reload: this.newer }), 4);
  }
}
