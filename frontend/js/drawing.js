/**
 * The only file that meets plotly: draws figures, tells where a pointer is on a chart, makes pictures to take away.
 */

import { WORDS } from "./words.js";

const CONFIG = { displayModeBar: false, scrollZoom: false, doubleClick: false, staticPlot: false, responsive: false };

/** @type {Promise<any>|null} */
let waiting = null;

/** @type {() => void} */
let open = () => {};
const gate = new Promise((resolve) => {
  open = () => resolve(undefined);
});

/**
 * Let plotly begin. Running its script takes longer than all else on the page, so the first map, which needs none of
 * it, is painted before.
 */
export function begin() {
  requestAnimationFrame(() => setTimeout(open, 0));
}

/**
 * When its script runs, plotly adds the styles of a tile map, which this page has not and the content policy refuses,
 * unless an element with the styles' name (64 hexadecimal digits) is there already. Let it find one.
 * @returns {() => void}  ends the pretence
 */
function withoutStyles() {
  const stand = document.createElement("meta");
  const find = Document.prototype.getElementById;
  document.getElementById = (id) => find.call(document, id) ?? (/^[0-9a-f]{64}$/.test(id) ? stand : null);
  return () => delete document.getElementById;
}

/** plotly.js, fetched with the page and run when first wanted: asking the service comes before it. */
function plotly() {
  waiting ??= new Promise((resolve, reject) => {
    const script = document.createElement("script");
    script.src = "/vendor/plotly.min.js";
    const done = withoutStyles();
    script.addEventListener("load", () => {
      done();
      resolve(window.Plotly);
    });
    script.addEventListener("error", () => {
      done();
      waiting = null;
      script.remove();
      reject(new Error(WORDS.noPlotly));
    });
    document.head.append(script);
  });
  return waiting;
}

/**
 * Draw a figure in an element, or bring the drawing there up to date.
 * @param {HTMLElement} element
 * @param {{data: object[], layout: object}} figure
 */
export async function draw(element, figure) {
  await gate;
  const Plotly = await plotly();
  const layout = { ...figure.layout, width: element.clientWidth, height: element.clientHeight };
  if (!layout.width || !layout.height) return;
  await Plotly.react(element, figure.data, layout, CONFIG);
}

/** Take a drawing away. @param {HTMLElement} element */
export function erase(element) {
  if (window.Plotly && element._fullLayout) window.Plotly.purge(element);
}

/**
 * A picture of a figure as a file to keep.
 * @param {{data: object[], layout: object}} figure
 * @param {{width: number, height: number, name: string, format: "png"|"svg"}} how
 */
export async function takePicture(figure, { width, height, name, format }) {
  const Plotly = await plotly();
  const url = await Plotly.toImage({ data: figure.data, layout: { ...figure.layout, width, height } }, { format, width, height, scale: format === "png" ? 2 : 1 });
  const link = document.createElement("a");
  link.href = url;
  link.download = name;
  document.body.append(link);
  link.click();
  link.remove();
}
