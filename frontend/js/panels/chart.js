/**
 * The map: draws the scene, turns clicks and arrow keys into a chosen place.
 */

import { STATES } from "../colour.js";
import { draw, erase, takePicture } from "../drawing.js";
import { csvText, MAP_HEADS, mapRows, save } from "../exporting.js";
import { differenceEnds, differenceMap } from "../figures/compare.js";
import { aspectOf, frameOf, heightOf, mapFigure, told } from "../figures/map.js";
import { paint, projection } from "../painting.js";
import { clockText } from "../state.js";
import { bothClocks, dateText, fixed, LAYER_WORDS, latText, lonText, STATE_WORDS, timeText, WORDS } from "../words.js";
import { make } from "./parts.js";

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
  /** Kept, since asking for it costs a layout of the page at each step. */
  #width = 0;
  /** @type {import("../painting.js").Projection|null} */ #projection = null;
  #other;
  #compared;
  #table;

  /** @param {Record<"map"|"cells"|"frame"|"title"|"time"|"note"|"other"|"compared"|"table", any>} elements @param {import("../state.js").State} state */
  constructor({ map, cells, frame, title, time, note, other, compared, table }, state) {
    this.#other = { box: other, element: other.querySelector(".map-other"), cells: other.querySelector("canvas"), frame: other.querySelector(".map-other-frame"), framed: "" };
    this.#compared = compared;
    this.#table = table;
    table.closest("details").addEventListener("toggle", () => this.#fillTable());
    this.#element = map;
    this.#cells = cells;
    this.#frame = frame;
    this.#title = title;
    this.#time = time;
    this.#note = note;
    this.#state = state;
    map.addEventListener("click", this.#click);
    map.addEventListener("keydown", this.#key);
    this.#watcher = new ResizeObserver(() => {
      this.#width = map.clientWidth;
      if (this.#scene) this.#paint();
    });
    this.#watcher.observe(map);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    const { day, view, time } = scene;
    this.#title.textContent = LAYER_WORDS[view.layer].title;
    this.#time.textContent = `${dateText(time)}, ${bothClocks(time, day.region.timezone, view.clock)}`;
    this.#element.setAttribute("aria-label", `${WORDS.mapOf(day.region.name)} ${LAYER_WORDS[view.layer].title}, ${bothClocks(time, day.region.timezone, view.clock)}`);
    const frame = frameOf(day.grid);
    this.#element.closest(".chart-body").style.setProperty("--aspect", aspectOf(frame).toFixed(4));
    this.#compare();
    this.#paint();
    this.#fillTable();
  }

  /** Two maps side by side, or the difference, or one map. */
  #compare() {
    const { view, other } = this.#scene;
    const difference = differs(this.#scene);
    this.#other.box.hidden = !view.versus || difference || view.ask !== "past";
    this.#element.closest(".chart-body").classList.toggle("two", !this.#other.box.hidden);
    this.#compared.hidden = !view.versus || view.ask !== "past";
    const states = view.layer === "state" && !view.beside ? ` ${WORDS.noDifferenceOfStates}` : "";
    this.#compared.textContent = view.versus ? other?.trouble || (other?.label ? WORDS.comparedWith(other.label, difference) + states : WORDS.loadingMap) : "";
  }

  /** @param {string} text @param {() => void} [again]  may it be tried again */
  note(text, again) {
    this.#note.textContent = text;
    if (again) this.#note.append(" ", make("button", { type: "button", text: WORDS.tryAgain, click: () => again() }));
  }

  /** The numbers of the map on the screen as a text table: of a difference, the differences. */
  textTable() {
    const { fields, index, difference, unseenSigma } = this.#contents();
    if (!fields || index < 0) return;
    const rows = mapRows(fields, index, STATES, unseenSigma);
    if (difference) save(csvText(MAP_HEADS.slice(0, -1), rows.map((row) => row.slice(0, -1))), this.#name("difference.csv"), "text/csv");
    else save(csvText(MAP_HEADS, rows), this.#name("map.csv"), "text/csv");
  }

  #name(ending) {
    const { day, view } = this.#scene;
    return `skylag-${plainName(day.region.name)}-${day.day}-${clockText(view.minute ?? 0).replace(":", "")}-${ending}`;
  }

  #fillTable() {
    const details = this.#table.closest("details");
    if (!details.open || !this.#scene) return;
    const contents = this.#contents();
    if (!contents.fields || contents.index < 0) return;
    const { other } = this.#scene;
    const tables = [this.#tableOf(contents, contents.difference ? `, ${WORDS.lessThat} ${other.label}` : "")];
    if (!this.#other.box.hidden && other?.fields) tables.push(this.#tableOf(this.#otherContents(contents), `, ${other.label}`));
    this.#table.replaceChildren(...tables);
  }

  /** One map as a table. @param {string} more  what the caption says besides */
  #tableOf({ fields, index, layer, unseenSigma }, more) {
    const { lats, lons, layers } = fields;
    const rows = Array.from(lats, (_, r) => r).reverse();
    const decimals = { delay: 2, uncertainty: 2, slope: 1 }[layer];
    const text = (at) => (told(fields, at, layer, unseenSigma) ? `${fixed(layers[layer][at], decimals)}${layers.state[at] ? "" : "*"}` : STATE_WORDS[STATES[layers.state[at]]].name);
    const { title, unit } = LAYER_WORDS[layer];
    const body = make("tbody");
    for (const r of rows) {
      body.append(make("tr", {}, make("th", { scope: "row", text: latText(lats[r]) }), ...Array.from(lons, (_, c) => make("td", { class: "number", text: text((index * lats.length + r) * lons.length + c) }))));
    }
    return make("table", {}, make("caption", { text: WORDS.mapCaption(`${title}${unit ? `, ${unit}` : ""}${more}`, timeText(this.#scene.time)) }),
      make("thead", {}, make("tr", {}, make("td"), ...Array.from(lons, (lon) => make("th", { scope: "col", class: "number", text: lonText(lon) })))), body);
  }

  /** A picture of the chart as it stands, with title, colour bar and caution; of two side by side, one of each. @param {"png"|"svg"} format */
  async picture(format) {
    const { day, view, time, other } = this.#scene;
    const contents = this.#contents();
    const height = 1000;
    const take = (what, heading, ending) =>
      takePicture(
        mapFigure({ ...what, width: 1200, title: `<b>${day.region.name}</b>  ${heading}`, foot: [day.simulated ? WORDS.simulated : "", WORDS.dotted, day.caution].filter(Boolean).join("<br>") }),
        { width: Math.round((height - 172) * aspectOf(contents.frame) + 236), height, format, name: this.#name(`${view.layer}${ending}.${format}`) },
      );
    const { title } = LAYER_WORDS[view.layer];
    const when = `<br>${dateText(time)}, ${bothClocks(time, day.region.timezone, view.clock)}`;
    await take(contents, `${title}${contents.difference ? `, ${WORDS.lessThat} ${other.label}` : ""}${when}`, contents.difference ? "-difference" : "");
    if (!this.#other.box.hidden && other?.fields) await take(this.#otherContents(contents), `${title}<br>${other.label}, ${bothClocks(time, day.region.timezone, view.clock)}`, "-other");
  }

  /** The map compared with: the same frame and scale, without this day's flags and states. */
  #otherContents(contents) {
    const { other } = this.#scene;
    const sites = contents.sites.map(({ state, ...site }) => site);
    return { ...contents, fields: other?.fields ?? null, index: other?.index ?? -1, flags: [], rays: [], sites };
  }

  close() {
    this.#watcher.disconnect();
    this.#element.removeEventListener("click", this.#click);
    this.#element.removeEventListener("keydown", this.#key);
    erase(this.#frame);
    erase(this.#other.frame);
  }

  #contents() {
    const { day, view, fields, index, time, theme, rays, raysTime, siteStates, coast, other } = this.#scene;
    const difference = differs(this.#scene) && Boolean(other?.fields && fields && index >= 0);
    const less = difference ? differenceMap({ fields, index }, other, day.region.unseenSigma) : null;
    // Pierce points belong to one moment: those of another are not drawn. Who has none is a receiver without data.
    const current = view.show.has("rays") && raysTime === time;
    const heard = new Set(rays.map((ray) => ray.receiver));
    return {
      frame: frameOf(day.grid),
      layer: view.layer,
      theme,
      time,
      fields: less ? less.fields : fields,
      index: less ? less.index : index,
      difference,
      ends: less ? differenceEnds(day.ends) : day.ends,
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
      veil: view.show.has("veil") && !difference,
      width: this.#width,
    };
  }

  /** The cells and all that stands on them at once, on canvas; plotly's axes and frame only when they change. */
  #paint() {
    this.#width ||= this.#element.clientWidth;
    const width = this.#width;
    if (!this.#scene || !width) return;
    const contents = this.#contents();
    const height = heightOf(contents.frame, width);
    if (this.#element.style.height !== `${height}px`) this.#element.style.height = `${height}px`;
    const figure = mapFigure(contents);
    this.#projection = projection(figure.layout, width, height);
    paint(this.#cells, figure, this.#projection);
    this.#element.dataset.time = String(this.#scene.time);
    this.#element.dataset.flags = contents.flags.map((flag) => flag.kind).join(" ");
    const complete = contents.fields && contents.index >= 0;
    this.#element.dataset.drawn = complete ? "fields" : "base";
    if (complete && !performance.getEntriesByName("first map").length) performance.mark("first map");
    this.#paintOther(contents);
    const key = JSON.stringify([contents.frame, contents.theme, width, height]);
    if (key !== this.#framed) {
      this.#framed = key;
      draw(this.#frame, { data: [], layout: { ...figure.layout, plot_bgcolor: "rgba(0,0,0,0)" } }).catch((error) => {
        this.#framed = "";
        this.note(error.message);
      });
    }
  }

  /** The other day's map beside. */
  #paintOther(contents) {
    const { box, element, cells, frame, framed } = this.#other;
    const width = box.hidden ? 0 : element.clientWidth;
    if (!width) return;
    const { other } = this.#scene;
    const height = heightOf(contents.frame, width);
    element.style.height = `${height}px`;
    const figure = mapFigure({ ...this.#otherContents(contents), width });
    paint(cells, figure, projection(figure.layout, width, height));
    element.dataset.drawn = other?.fields ? "fields" : "base";
    const key = JSON.stringify([contents.frame, contents.theme, width, height]);
    if (key === framed) return;
    this.#other.framed = key;
    draw(frame, { data: [], layout: { ...figure.layout, plot_bgcolor: "rgba(0,0,0,0)" } }).catch(() => {
      this.#other.framed = "";
    });
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

/** Is the difference of two days shown? States have none. @param {import("../main.js").Scene} scene */
export function differs({ view }) {
  return Boolean(view.versus && !view.beside && view.layer !== "state" && view.ask === "past");
}
