// @ts-check
/** The live socket: asks, hands on what comes, and comes back by itself. */
import { mapOf } from "./frame.js";

/** @typedef {import("./types.js").LiveMap} LiveMap */
/** @typedef {{state: "opening" | "open" | "waiting" | "closed", code: number, waitS: number}} LinkState */

/**
 * @typedef {object} Listener
 * @property {(hello: Record<string, any>) => void} onHello
 * @property {(map: LiveMap) => void} onMap
 * @property {(topic: string, message: any) => void} onState
 * @property {() => void} onLink the state of the link has changed
 */

const FIRST_S = 0.5;
const MOST_S = 15;
/** No frame for so long on an open link: it is dead, whatever the browser says. Status comes each second. */
const SILENT_S = 6;

/**
 * Seconds to wait before the next try. 1013: the service has no room or we did not keep up, so it is left in peace for
 * longer; all are spread out, so that many screens do not come back in the same instant.
 * @param {number} tries failed so far, 0 after a good connection @param {number} code of the close
 * @param {number} random 0..1
 */
export function waitBefore(tries, code, random) {
  const least = code === 1013 ? 2 : code === 1008 ? 10 : FIRST_S;
  return Math.min(MOST_S, least * 2 ** Math.min(tries, 6)) * (0.5 + random / 2);
}

export class Link {
  /** @param {string} address @param {Listener} listener @param {() => number} [random] */
  constructor(address, listener, random = Math.random) {
    this.address = address;
    this.listener = listener;
    this.random = random;
    /** @type {LinkState} */
    this.state = { state: "closed", code: 0, waitS: 0 };
    /** @type {WebSocket | null} */
    this.socket = null;
    /** @type {object | null} */
    this.request = null;
    this.tries = 0;
    this.timer = 0;
    this.heardMs = 0;
    this.bytes = 0;
    this.bad = 0;
  }

  open() {
    this.set("opening", 0, 0);
    const socket = new WebSocket(this.address, "soundrose.v1");
    socket.binaryType = "arraybuffer";
    socket.onmessage = (event) => this.take(event.data);
    socket.onclose = (event) => this.closed(event.code);
    this.socket = socket;
    this.heardMs = performance.now();
  }

  /** What to ask for from now on. @param {object} request */
  ask(request) {
    this.request = request;
    if (this.state.state === "open") this.socket?.send(JSON.stringify(request));
  }

  /** Called now and then: gives up a link on which nothing comes. @param {number} nowMs */
  check(nowMs) {
    if (this.socket !== null && this.state.state !== "waiting" && nowMs - this.heardMs > SILENT_S * 1000) this.drop(1006);
  }

  destroy() {
    clearTimeout(this.timer);
    this.forget();
    this.set("closed", 0, 0);
  }

  /** @param {string | ArrayBuffer} data */
  take(data) {
    this.heardMs = performance.now();
    if (typeof data === "string") {
      this.bytes += data.length;
      this.takeText(JSON.parse(data));
      return;
    }
    this.bytes += data.byteLength;
    this.tries = 0;
    this.listener.onMap(mapOf(data));
  }

  /** @param {Record<string, any>} message */
  takeText(message) {
    if (message.kind === "hello") {
      this.set("open", 0, 0);
      this.listener.onHello(message);
      if (this.request !== null) this.socket?.send(JSON.stringify(this.request));
    } else if (message.kind === "error") {
      this.bad++;
      console.warn(`the service refused: ${message.detail}`);
    } else if (message.cursor === undefined) this.listener.onState(String(message.kind), message);
  }

  /** @param {number} code */
  closed(code) {
    this.forget();
    const waitS = waitBefore(this.tries++, code, this.random());
    this.set("waiting", code, waitS);
    this.timer = setTimeout(() => this.open(), waitS * 1000);
  }

  /** @param {number} code */
  drop(code) {
    this.socket?.close();
    this.closed(code);
  }

  forget() {
    if (this.socket === null) return;
    this.socket.onmessage = null;
    this.socket.onclose = null;
    this.socket.close();
    this.socket = null;
  }

  /** @param {LinkState["state"]} state @param {number} code @param {number} waitS */
  set(state, code, waitS) {
    this.state = { state, code, waitS };
    this.listener.onLink();
  }
}
