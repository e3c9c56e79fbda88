/**
 * The map: draws the scene, turns clicks and arrow keys into a chosen place.
 */

import { draw, erase, placeUnder, takePicture } from "../drawing.js";
import { aspectOf, frameOf, mapFigure } from "../figures/map.js";
import { bothClocks, dateText, LAYER_WORDS, WORDS } from "../words.js";

export class ChartPanel {
  #element;
  #state;
  #title;
  #time;
  #note;
  #watcher;
  #scene = null;
  #drawing = false;
  #again = false;

  /** @param {{map: HTMLElement, title: HTMLElement, time: HTMLElement, note: HTMLElement}} elements @param {import("../state.js").State} state */
  constructor({ map, title, time, note }, state) {
    this.#element = map;
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
    this.#time.textContent = `${dateText(time)}, ${bothClocks(time, day.region.timezone)}`;
    this.#element.setAttribute("aria-label", `Map of ${day.region.name}. ${LAYER_WORDS[view.layer].title}, ${bothClocks(time, day.region.timezone)}`);
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
      title: `<b>${day.region.name}</b>  ${LAYER_WORDS[view.layer].title}<br>${dateText(time)}, ${bothClocks(time, day.region.timezone)}`,
      foot: `${day.simulated ? `${WORDS.simulated}<br>` : ""}${day.caution}`,
    });
    await takePicture(figure, {
      width: Math.round((height - 160) * aspectOf(frame) + 236),
      height,
      name: `skylag-${day.region.key}-${day.day}-${view.layer}.png`,
    });
  }

  close() {
    this.#watcher.disconnect();
    this.#element.removeEventListener("click", this.#click);
    this.#element.removeEventListener("keydown", this.#key);
    erase(this.#element);
  }

  #contents() {
    const { day, view, fields, index, time, theme, rays, siteStates, coast } = this.#scene;
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
      receivers: view.show.has("receivers") ? day.receivers : [],
      rays: view.show.has("rays") ? rays : [],
      sites: view.show.has("sites")
        ? day.sites.map((site, number) => ({ ...site, state: siteStates?.stateOf(number, time) }))
        : [],
      flags: day.flags.filter((flag) => flag.start <= time && time <= flag.end),
      place: view.place,
      veil: view.show.has("veil"),
      width: this.#element.clientWidth,
    };
  }

  /** One drawing at a time; what arrives meanwhile is drawn once, as it then stands. */
  async #paint() {
    if (this.#drawing) {
      this.#again = true;
      return;
    }
    this.#drawing = true;
    try {
      do {
        this.#again = false;
        await draw(this.#element, mapFigure(this.#contents()));
        this.#element.dataset.time = String(this.#scene.time);
        this.#element.dataset.drawn = this.#scene.fields ? "fields" : "base";
        if (this.#scene.fields && !performance.getEntriesByName("first map").length) performance.mark("first map");
      } while (this.#again);
    } finally {
      this.#drawing = false;
    }
  }

  #click = (event) => {
    const place = placeUnder(this.#element, event);
    if (place) this.#state.change({ place: [Number(place[0].toFixed(3)), Number(place[1].toFixed(3))] });
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
