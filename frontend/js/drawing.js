/**
 * The only file that meets plotly: draws figures, tells where a pointer is on a chart, makes pictures to take away.
 */

const CONFIG = { displayModeBar: false, scrollZoom: false, doubleClick: false, staticPlot: false, responsive: false };

/** Plotly arrives by its own script; whoever draws first waits for it. @returns {Promise<any>} */
let waiting = null;
function plotly() {
  if (window.Plotly) return Promise.resolve(window.Plotly);
  waiting ??= new Promise((resolve, reject) => {
    const started = performance.now();
    const look = () => {
      if (window.Plotly) resolve(window.Plotly);
      else if (performance.now() - started > 20000) reject(new Error("plotly.js did not load from this server"));
      else setTimeout(look, 15);
    };
    look();
  });
  return waiting;
}

/**
 * Draw a figure in an element, or bring the drawing there up to date.
 * @param {HTMLElement} element
 * @param {{data: object[], layout: object}} figure
 */
export async function draw(element, figure) {
  const Plotly = await plotly();
  const layout = { ...figure.layout, width: element.clientWidth, height: element.clientHeight };
  if (!layout.width || !layout.height) return;
  await Plotly.react(element, figure.data, layout, CONFIG);
}

/**
 * The place under a pointer, or null outside the frame.
 * @param {HTMLElement} element  one that `draw` drew in
 * @param {{clientX: number, clientY: number}} pointer
 * @returns {[number, number]|null}  lat, lon (the figure's y and x)
 */
export function placeUnder(element, pointer) {
  const axes = element._fullLayout;
  if (!axes?.xaxis) return null;
  const box = element.getBoundingClientRect();
  const x = pointer.clientX - box.left - axes.xaxis._offset;
  const y = pointer.clientY - box.top - axes.yaxis._offset;
  if (x < 0 || y < 0 || x > axes.xaxis._length || y > axes.yaxis._length) return null;
  return [axes.yaxis.p2d(y), axes.xaxis.p2d(x)];
}

/**
 * Where a place of the figure lies on the screen: the inverse of `placeUnder`.
 * @param {HTMLElement} element
 * @param {[number, number]} place
 */
export function pixelOf(element, [lat, lon]) {
  const axes = element._fullLayout;
  const box = element.getBoundingClientRect();
  return {
    clientX: box.left + axes.xaxis._offset + axes.xaxis.d2p(lon),
    clientY: box.top + axes.yaxis._offset + axes.yaxis.d2p(lat),
  };
}

/** Take a drawing away. @param {HTMLElement} element */
export function erase(element) {
  if (window.Plotly && element._fullLayout) window.Plotly.purge(element);
}

/**
 * A picture of a figure as a file to keep.
 * @param {{data: object[], layout: object}} figure
 * @param {{width: number, height: number, name: string}} how
 */
export async function takePicture(figure, { width, height, name }) {
  const Plotly = await plotly();
  const url = await Plotly.toImage({ data: figure.data, layout: { ...figure.layout, width, height } }, { format: "png", width, height, scale: 2 });
  const link = document.createElement("a");
  link.href = url;
  link.download = name;
  document.body.append(link);
  link.click();
  link.remove();
}
