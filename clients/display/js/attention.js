// @ts-check
/**
 * What is out of order now and what to do about it: cautions in the sense of IMO MSC.302(87), steady, without sound,
 * gone when the condition is. `wrong` marks what makes the picture invalid.
 */
import { age } from "./wording.js";

/** @typedef {{kind: "caution" | "wrong", text: string}} Item */

/**
 * @typedef {object} Situation
 * @property {import("./link.js").LinkState} link
 * @property {import("./types.js").Status | null} status
 * @property {import("./types.js").Health | null} health
 * @property {import("./types.js").LiveMap | null} map
 * @property {import("./freshness.js").Freshness} freshness
 * @property {number} ageS
 * @property {boolean} calibrated
 * @property {boolean} reload the service runs another version than this page
 */

/** @param {Situation} now @returns {Item[]} the gravest first */
export function attention(now) {
  return [...linkItems(now), ...feedItems(now), ...mapItems(now), ...lasting(now)];
}

/** @param {Situation} now @returns {Item[]} */
function linkItems(now) {
  if (now.link.state === "open") return [];
  const wait = now.link.state === "waiting" ? `, next try within ${Math.ceil(now.link.waitS)} s` : "";
  return [{ kind: "wrong", text: `No link to the service${wait}. Check that it runs.` }];
}

/** @param {Situation} now @returns {Item[]} */
function feedItems(now) {
  /** @type {Item[]} */
  const items = [];
  const state = now.status?.state;
  if (state === "stalled") items.push({ kind: "wrong", text: "Feed stalled: no samples come. Check the array and its sender." });
  if (state === "waiting") items.push({ kind: "caution", text: "Feed waiting: no array has begun to send." });
  const down = (now.status?.processes ?? []).filter((process) => process.state !== "up");
  for (const process of down.slice(0, 2)) {
    items.push({ kind: "caution", text: `Process ${process.name} is ${process.state}; it is started again by itself.` });
  }
  if (now.freshness === "stale" || now.freshness === "covered") {
    items.push({ kind: now.freshness === "covered" ? "wrong" : "caution", text: `Picture is ${age(now.ageS)} old. Do not rely on it.` });
  }
  return items;
}

/** @param {Situation} now @returns {Item[]} */
function mapItems(now) {
  /** @type {Item[]} */
  const items = [];
  const { map } = now;
  if (map === null) return items;
  if (map.limits.gap) items.push({ kind: "caution", text: "Samples were missing: the average holds little for now." });
  if (map.limits.clipped > 0.0001) {
    items.push({ kind: "caution", text: `${(100 * map.limits.clipped).toFixed(2)} % of samples clipped: lower the gain.` });
  }
  if (map.limits.masked > 0.2) items.push({ kind: "caution", text: `${Math.round(100 * map.limits.masked)} % of time under own pulses.` });
  return items;
}

/** @param {Situation} now @returns {Item[]} */
function hydrophoneItems(now) {
  const channels = now.health?.channels ?? [];
  const dead = channels.filter((c) => c.state === "dead");
  const doubtful = channels.filter((c) => !["good", "not judged", "excluded", "dead"].includes(c.state));
  const named = (/** @type {typeof channels} */ list) => `Hydrophone${list.length > 1 ? "s" : ""} `
    + list.slice(0, 4).map((c) => c.i).join(", ") + (list.length > 4 ? " ..." : "");
  /** @type {Item[]} */
  const items = [];
  if (dead.length > 0) items.push({ kind: "caution", text: `${named(dead)} dead and left out of the beams. Log it.` });
  if (doubtful.length > 0) items.push({ kind: "caution", text: `${named(doubtful)} in doubt: judge levels with care.` });
  return items;
}

/** @param {Situation} now @returns {Item[]} */
function lasting(now) {
  /** @type {Item[]} */
  const items = [];
  const load = now.status?.load ?? 0;
  if (load > 0.9) items.push({ kind: "caution", text: `Load ${Math.round(100 * load)} %: hops will be dropped above 100 %.` });
  items.push(...hydrophoneItems(now));
  if (!now.calibrated) items.push({ kind: "caution", text: "Uncalibrated: levels are relative. Enter the calibration." });
  if (now.reload) items.push({ kind: "caution", text: "The service is of another version. Load this page anew." });
  return items;
}

