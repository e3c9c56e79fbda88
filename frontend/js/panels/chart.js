/**
 * The map: draws the scene, turns clicks and arrow keys into a chosen place.
 */

import { draw, erase, takePicture } from "../drawing.js";
import { aspectOf, frameOf, heightOf, mapFigure } from "../figures/map.js";
import { paint, projection } from "../painting.js";
import { clockText } from "../state.js";
import { bothClocks, dateText, LAYER_WORDS, WORDS } from "../words.js";

/** A name fit for a file. @param {string} text */
function plainName(text) {
  return text.toLowerCase().replace(/[^\p{L}\p{N}]+/gu, "-").replace(/^-|-$/g, "");
}

export class ChartPanel {
  #element;
  #state;
  #title;
  #time;
  #note;
  #watcher;
  #scene = null;
  #cells;
  #frame;
  #framed = "";
  /** @type {import("../painting.js").Projection|null} */ #projection = null;

  /** @param {{map: HTMLElement, cells: HTMLCanvasElement, frame: HTMLElement, title: HTMLElement, time: HTMLElement, note: HTMLElement}} elements @param {import("../state.js").State} state */
  constructor({ map, cells, frame, title, time, note }, state) {
    this.#element = map;
    this.#cells = cells;
    this.#frame = frame;
    this.#title = title;
    this.#time = time;
    this.#note = note;
    this.#state = state;
    map.addEventListener("click", this.#click);
    map.addEventListener("keydown", this.#key);
    this.#watcher = new ResizeObserver(() => this.#scene && this.#paint());
    this.#watcher.observe(map);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    const { day, view, time } = scene;
    this.#title.textContent = LAYER_WORDS[view.layer].title;
    this.#time.textContent = `${dateText(time)}, ${bothClocks(time, day.region.timezone, view.clock)}`;
    this.#element.setAttribute("aria-label", `Map of ${day.region.name}. ${LAYER_WORDS[view.layer].title}, ${bothClocks(time, day.region.timezone, view.clock)}`);
    const frame = frameOf(day.grid);
    this.#element.parentElement.style.setProperty("--aspect", aspectOf(frame).toFixed(4));
    this.#paint();
  }

  /** @param {string} text */
  note(text) {
    this.#note.textContent = text;
  }

  /** A picture of the chart as it stands, with title, colour bar and caution. */
  async picture() {
    const { day, view, time } = this.#scene;
    const contents = this.#contents();
    const frame = contents.frame;
    const height = 1000;
    const figure = mapFigure({
      ...contents,
      width: 1200,
      title: `<b>${day.region.name}</b>  ${LAYER_WORDS[view.layer].title}<br>${dateText(time)}, ${bothClocks(time, day.region.timezone, view.clock)}`,
      foot: [day.simulated ? WORDS.simulated : "", WORDS.dotted, day.caution].filter(Boolean).join("<br>"),
    });
    await takePicture(figure, {
      width: Math.round((height - 172) * aspectOf(frame) + 236),
      height,
      name: `skylag-${plainName(day.region.name)}-${day.day}-${clockText(view.minute ?? 0).replace(":", "")}-${view.layer}.png`,
    });
  }

  close() {
    this.#watcher.disconnect();
    this.#element.removeEventListener("click", this.#click);
    this.#element.removeEventListener("keydown", this.#key);
    erase(this.#frame);
  }

  #contents() {
    const { day, view, fields, index, time, theme, rays, raysTime, siteStates, coast } = this.#scene;
    // Pierce points belong to one moment: those of another are not drawn. Who has none is a receiver without data.
    const current = view.show.has("rays") && raysTime === time;
    const heard = new Set(rays.map((ray) => ray.receiver));
    return {
      frame: frameOf(day.grid),
      layer: view.layer,
      theme,
      time,
      fields,
      index,
      ends: day.ends,
      unseenSigma: day.region.unseenSigma,
      coast,
      receivers: view.show.has("receivers")
        ? day.receivers.map((receiver) => ({ ...receiver, fresh: !current || heard.has(receiver.name) }))
        : [],
      rays: current ? rays : [],
      sites: view.show.has("sites")
        ? day.sites.map((site, number) => ({ ...site, state: siteStates?.stateOf(number, time) }))
        : [],
      flags: day.flags.filter((flag) => flag.start <= time && time <= flag.end),
      place: view.place,
      veil: view.show.has("veil"),
      width: this.#element.clientWidth,
    };
  }

  /** The cells and all that stands on them at once, on canvas; plotly's axes and frame only when they change. */
  #paint() {
    if (!this.#scene || !this.#element.clientWidth) return;
    const contents = this.#contents();
    const width = this.#element.clientWidth;
    const height = heightOf(contents.frame, width);
    this.#element.style.height = `${height}px`;
    const figure = mapFigure(contents);
    this.#projection = projection(figure.layout, width, height);
    paint(this.#cells, figure, this.#projection);
    this.#element.dataset.time = String(this.#scene.time);
    this.#element.dataset.flags = contents.flags.map((flag) => flag.kind).join(" ");
    const complete = contents.fields && contents.index >= 0;
    this.#element.dataset.drawn = complete ? "fields" : "base";
    if (complete && !performance.getEntriesByName("first map").length) performance.mark("first map");
    const key = JSON.stringify([contents.frame, contents.theme, width, height]);
    if (key !== this.#framed) {
      this.#framed = key;
      draw(this.#frame, { data: [], layout: { ...figure.layout, plot_bgcolor: "rgba(0,0,0,0)" } }).catch((error) => {
        this.#framed = "";
        this.note(error.message);
      });
    }
  }

  #click = (event) => {
    const p = this.#projection;
    if (!p) return;
    const box = this.#element.getBoundingClientRect();
    const [x, y] = [event.clientX - box.left, event.clientY - box.top];
    if (x < p.left || x > p.right || y < p.top || y > p.bottom) return;
    this.#state.change({ place: [Number(p.lat(y).toFixed(3)), Number(p.lon(x).toFixed(3))] });
  };

  #key = (event) => {
    const moves = { ArrowUp: [1, 0], ArrowDown: [-1, 0], ArrowRight: [0, 1], ArrowLeft: [0, -1] };
    const move = moves[event.key];
    if (!move || !this.#scene || event.altKey || event.ctrlKey || event.metaKey) return;
    event.preventDefault();
    const { region, grid } = this.#scene.day;
    const from = this.#state.view.place ?? [(region.south + region.north) / 2, (region.west + region.east) / 2];
    const step = grid.lats.length > 1 ? grid.lats[1] - grid.lats[0] : 0.5;
    const clamp = (v, low, high) => Math.min(high, Math.max(low, v));
    const lat = clamp(from[0] + move[0] * step, region.south, region.north);
    const lon = clamp(from[1] + move[1] * step, region.west, region.east);
    this.#state.change({ place: [Number(lat.toFixed(3)), Number(lon.toFixed(3))] });
  };
}
