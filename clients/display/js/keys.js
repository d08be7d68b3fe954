// @ts-check
/** The keyboard map: every action of the display has a key, and buttons show it. */

/**
 * @typedef {object} Action
 * @property {string} id
 * @property {string[]} keys as the browser names them; the first is shown
 * @property {string} shown on the button and in the help
 * @property {string} text what it does
 * @property {string} [button] word on its button, where it has one
 * @property {(big: boolean) => void} run big: with Shift
 */

/** Keys that work even where single keys are switched off. */
const ALWAYS = new Set(["?", "Escape", "F2"]);

/**
 * The action of a key, or null. Nothing is taken while something is typed, or with Ctrl, Alt or Meta.
 * @param {readonly Action[]} actions
 * @param {{key: string, ctrlKey: boolean, altKey: boolean, metaKey: boolean}} event @param {boolean} single
 */
export function actionFor(actions, event, single) {
  if (event.ctrlKey || event.altKey || event.metaKey) return null;
  if (!single && !ALWAYS.has(event.key)) return null;
  const key = event.key.length === 1 ? event.key.toLowerCase() : event.key;
  return actions.find((action) => action.keys.includes(key)) ?? null;
}
