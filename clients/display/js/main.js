// @ts-check
/** Makes the display of this page. */
import { Display } from "./display.js";
import { Page } from "./dom.js";

const address = `${location.protocol === "https:" ? "wss" : "ws"}://${location.host}/api/v1/live`;
new Display(new Page(document), localStorage, address).start();
