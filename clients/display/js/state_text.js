// @ts-check
/** Words about the state of things: top line, titles, buttons, cautions. */
import { angleDeg } from "./beams.js";
import { DIMMER } from "./palettes.js";
import { pointerPairs } from "./readout.js";
import { stripText } from "./strip_view.js";
import { age, bearing, clock, frequency } from "./wording.js";

/** @typedef {import("./display.js").Display} Display */

/** @param {Display} d */
export function showState(d) {
  const { page } = d;
  const nowS = performance.now() / 1000;
  const freshness = d.age.state(nowS);
  page.text("array", d.array?.array ?? "-");
  page.text("utc", d.map === null ? "--:--:-- UTC" : `${clock(d.map.tEndMs)} UTC`);
  const ageText = age(d.age.seconds(nowS));
  if (freshness === "none") page.mark("fresh", "no data yet", "caution");
  else if (freshness === "fresh") page.mark("fresh", "picture is live", "");
  else page.mark("fresh", `${freshness === "covered" ? "✕" : "■"} STALE ${ageText}`, freshness === "covered" ? "wrong" : "caution");
  const feed = d.status?.state ?? "-";
  const open = d.link.state.state === "open";
  page.mark("feed", open ? feed : "--", feed === "stalled" || !open ? "wrong" : feed === "running" ? "" : "caution");
  page.mark("link", linkText(d), open ? "" : "wrong");
  const band = d.band === null ? undefined : d.status?.bands[d.band.name];
  page.mark("load", open && band !== undefined ? `${Math.round(100 * band.load)} %` : "-- %", (band?.load ?? 0) > 0.9 ? "caution" : "");
  const p99 = band?.latency_ms.p99 ?? null;
  page.text("latency", open && p99 !== null ? `${Math.round(p99)} ms (p99)` : "-- ms");
  page.mark("calibration", "■ uncalibrated: levels are relative", "caution", d.array?.calibrated ?? true);
  page.text("used", d.health === null ? "" : `· ${d.health.used} of ${d.health.channels.length} hydrophones used`);
  page.text("strip-text", [stripText(d.health), countsText(d)].filter((text) => text !== "").join(" · "));
  showTitles(d);
}

/** What was lost on the way, since the service was started. @param {Display} d */
function countsText(d) {
  if (d.status === null) return "";
  const dropped = Object.values(d.status.dropped).reduce((sum, n) => sum + n, 0);
  const hops = d.band === null ? 0 : (d.status.bands[d.band.name]?.dropped_hops ?? 0);
  return `gaps ${d.status.gaps} (${d.status.lost_samples} samples lost), messages dropped ${dropped}, hops dropped ${hops}, `
    + `maps not shown here ${d.skipped}`;
}

/** @param {Display} d */
function linkText(d) {
  const { state, code, waitS } = d.link.state;
  if (state === "open") return "open";
  return state === "waiting" ? `lost (${code}), retry ${Math.ceil(waitS)} s` : state === "opening" ? "opening" : "--";
}

/** @param {Display} d */
function showTitles(d) {
  const { page, map } = d;
  const limits = d.scene().recordLimits;
  const range = d.choices.part === null ? null : d.rangesHz[d.choices.part];
  page.text("record-title", `${range === null || range === undefined ? "whole band"
    : `${frequency(range[0])} to ${frequency(range[1])}`}, colours ${limits.low} to ${limits.high} dB`);
  page.text("map-title", map === null ? "" : `averaged ${map.spanS.toFixed(1)} s, bins of ${map.dfHz.toFixed(2)} Hz, `
    + `${map.limits.channels_used} of ${map.limits.channels} hydrophones`);
  page.text("scale-title", d.choices.auto ? "slow automatic" : "by hand");
}

/** @param {Display} d */
export function showCursor(d) {
  const { page, cursor } = d;
  page.pairs("pointer", pointerPairs(d.scene()));
  page.text("pin", d.pinned ? "· held" : "");
  if (cursor === null) return;
  page.text("spectrum-title", `solid: beam ${bearing(angleDeg(cursor.cos))}; dashed: mean over beams (power)`);
  page.text("response-title", `at ${frequency(cursor.hz)}`);
}

/** Buttons as they are chosen, and the cautions with the bands named. @param {Display} d */
export function showChoices(d) {
  const { page, choices } = d;
  for (const band of d.array?.bands ?? []) page.button(`band-${band.name}`, `band ${band.name}`, band.name === d.band?.name);
  page.button("zoom-all", "whole", d.zoomed === null);
  page.button("pin", "hold", d.pinned);
  page.button("span", `record ${choices.spanS / 60} min`, false);
  page.button("part", choices.part === null ? "range: all" : `range ${choices.part + 1} of ${Math.max(1, d.rangesHz.length)}`, false);
  page.button("limit-auto", choices.auto ? "auto" : "by hand", choices.auto);
  page.button("time", choices.time, false);
  page.button("dim", `dim ${Math.round(100 * DIMMER[choices.dim])} %`, false);
  page.button("colours", choices.colours, false);
  page.button("distance", `eye ${choices.distanceM} m`, false);
  page.button("help", choices.keys ? "keys" : "keys off", false);
  const bands = (d.array?.bands ?? []).map((b) => `${b.band_hz[0]} to ${b.band_hz[1]} Hz`).join(", ");
  const cautions = cautionText(bands);
  page.text("cautions", cautions);
  page.text("help-cautions", cautions);
  page.text("version", `soundrose ${d.version}`);
}

/** @param {string} bands */
function cautionText(bands) {
  return "Not a navigation or collision-avoidance aid. Absence of detection is not absence of an animal or a vessel; "
    + `sounds outside the bands (${bands === "" ? "--" : bands}) are not heard at all. Decisions on mitigation are for qualified `
    + "observers under the permit and local rules in force. Levels are as good as the calibration entered. "
    + "A line array cannot tell port from starboard.";
}
