// @ts-check
/** Calls of the service. A call that fails is told by null: what asks again does so anyway. */
import { historyOf } from "./record.js";

/** @typedef {import("./types.js").ArrayInfo} ArrayInfo */

/** @returns {Promise<ArrayInfo | null>} */
export async function fetchArray() {
  try {
    const answer = await fetch("/api/v1/array");
    return answer.ok ? await answer.json() : null;
  } catch {
    return null;
  }
}

/**
 * Rows of the record after `since`.
 * @param {string} band @param {number | null} part of the ranges of frequency; null: all @param {string | null} since
 * @returns {Promise<import("./record.js").HistoryAnswer | null>}
 */
export async function fetchHistory(band, part, since) {
  const asked = new URLSearchParams({ band, format: "msgpack" });
  if (part !== null) asked.set("part", String(part));
  if (since !== null) asked.set("since", since);
  try {
    const answer = await fetch(`/api/v1/history?${asked}`);
    return answer.ok ? historyOf(await answer.arrayBuffer()) : null;
  } catch {
    return null;
  }
}
