/**
 * Small pieces several panels build: elements, state swatches, notices of trouble. Never fetches.
 */

import { useKey } from "../api.js";
import { placeAt } from "../figures/signs.js";
import { nearest } from "../figures/strip.js";
import { FILE_WORDS, STATE_WORDS, WORDS } from "../words.js";

const SVG = "http://www.w3.org/2000/svg";

/**
 * @param {string} tag
 * @param {Record<string, unknown>} [attributes]  "text" sets the text, functions become listeners
 * @param {...(Node|string)} children
 */
export function make(tag, attributes = {}, ...children) {
  const element = document.createElement(tag);
  fill(element, attributes);
  element.append(...children);
  return element;
}

/** The same for drawings. @param {string} tag @param {Record<string, unknown>} [attributes] @param {...Node} children */
export function draft(tag, attributes = {}, ...children) {
  const element = document.createElementNS(SVG, tag);
  fill(element, attributes);
  element.append(...children);
  return element;
}

function fill(element, attributes) {
  for (const [name, value] of Object.entries(attributes)) {
    if (value === undefined || value === null || value === false) continue;
    if (name === "text") element.textContent = String(value);
    else if (typeof value === "function") element.addEventListener(name, value);
    else element.setAttribute(name, value === true ? "" : String(value));
  }
}

/** A swatch with the colour and the pattern of a state. @param {string} state */
export function swatch(state, width = 34, height = 18) {
  return draft(
    "svg",
    { width, height, viewBox: `0 0 ${width} ${height}`, "aria-hidden": "true" },
    draft("rect", { x: 0.5, y: 0.5, width: width - 1, height: height - 1, fill: `url(#pattern-${state})`, class: `edge-${state}` }),
  );
}

/** A state's word with its swatch. @param {import("../colour.js").StateName} state */
export function stateWord(state) {
  return make("span", { class: "state-word" }, swatch(state, 22, 14), STATE_WORDS[state]?.name ?? state);
}

/**
 * A table that scrolls in its own box.
 * @param {{label: string, heads: string[], rows: (string|Node)[][], numbers?: number[], caption?: string}} contents  numbers: columns that hold them
 */
export function tableOf({ label, heads, rows, numbers = [], caption = "" }) {
  const kind = (i) => (numbers.includes(i) ? "number" : undefined);
  const body = make("tbody", {}, ...rows.map((row) => make("tr", {}, ...row.map((cell, i) => make(i ? "td" : "th", { class: kind(i), scope: i ? undefined : "row" }, cell)))));
  return make("div", { class: "scroll", tabindex: 0, role: "region", "aria-label": label },
    make("table", {}, ...(caption ? [make("caption", { text: caption })] : []), make("thead", {}, make("tr", {}, ...heads.map((text, i) => make("th", { scope: "col", class: kind(i), text })))), body));
}

/**
 * What went wrong, as the service says it, and the way out.
 * @param {Error} error
 * @param {(() => void)|null} again
 */
export function trouble(error, again = null) {
  const box = make("div", { class: "trouble", role: "alert" }, make("p", { text: error.message || WORDS.offline }));
  if (error.status === 401 && again) box.append(keyForm(again));
  else if (again) box.append(make("button", { type: "button", text: WORDS.tryAgain, click: again }));
  return box;
}

/** Where the server asks for a key. @param {() => void} then */
function keyForm(then) {
  const input = make("input", { type: "password", name: "key", autocomplete: "off", required: true });
  const form = make("form", { class: "key-form" }, make("label", {}, FILE_WORDS.key, " ", input), make("button", { text: FILE_WORDS.useKey }));
  form.addEventListener("submit", (event) => {
    event.preventDefault();
    useKey(input.value);
    then();
  });
  return form;
}

/**
 * The view that shows a flag best: the middle of its span, and where it then is.
 * @param {import("../api.js").Flag} flag
 * @param {import("../api.js").Day} day
 * @returns {{minute: number, place: [number, number]}}
 */
export function viewOf(flag, day) {
  const time = day.times[nearest(day.times, (flag.start + flag.end) / 2)];
  const [lat, lon] = placeAt(flag, time);
  return { minute: Math.round((time - day.start) / 60000), place: [Number(lat.toFixed(3)), Number(lon.toFixed(3))] };
}
