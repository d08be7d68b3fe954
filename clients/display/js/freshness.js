// @ts-check
/** How old the picture is: judged by data time that goes on, never by messages that come or a timer of the page. */

export const STALE_S = 2;
export const COVERED_S = 10;

/** @typedef {"none" | "fresh" | "stale" | "covered"} Freshness */

export class Age {
  constructor() {
    /** Data time of the newest map, ms; NaN before there is one. */
    this.dataMs = NaN;
    this.advancedS = NaN;
  }

  /**
   * A map has come. @param {number} tEndMs @param {number} nowS monotonic @param {number} [ageS] what the service
   * knows of its age: a page that has just come gets the newest map there is, which may be old
   */
  take(tEndMs, nowS, ageS = 0) {
    if (tEndMs !== this.dataMs) {
      this.dataMs = tEndMs;
      this.advancedS = nowS - ageS;
    } else if (nowS - ageS < this.advancedS - 1) this.advancedS = nowS - ageS;
  }

  /** @param {number} nowS @returns {number} seconds; NaN before the first map */
  seconds(nowS) {
    return nowS - this.advancedS;
  }

  /** @param {number} nowS @returns {Freshness} */
  state(nowS) {
    const seconds = this.seconds(nowS);
    if (Number.isNaN(seconds)) return "none";
    return seconds > COVERED_S ? "covered" : seconds > STALE_S ? "stale" : "fresh";
  }

  /** Another band: nothing of it has been seen. */
  reset() {
    this.dataMs = NaN;
    this.advancedS = NaN;
  }
}
