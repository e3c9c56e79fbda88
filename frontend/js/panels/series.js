/**
 * The delay of the chosen place over the day: a plot that shares its time axis with the strip, and a table behind it.
 */

import { draw, erase } from "../drawing.js";
import { csvText, save, SERIES_HEADS, seriesRows } from "../exporting.js";
import { LEFT, seriesFigure } from "../figures/series.js";
import { nearest } from "../figures/strip.js";
import { fixed, HEADS, placeText, timeText, withSigma, WORDS } from "../words.js";
import { make } from "./parts.js";

export class SeriesPanel {
  #elements;
  #scene = null;
  #series = null;
  #watcher;
  #drawn = "";
  #size = [0, 0];

  /** @param {{plot: HTMLElement, line: HTMLElement, note: HTMLElement, table: HTMLElement}} elements */
  constructor(elements) {
    this.#elements = elements;
    this.#watcher = new ResizeObserver(() => {
      this.#size = [elements.plot.clientWidth, elements.plot.clientHeight];
      if (this.#series) this.#place();
    });
    this.#watcher.observe(elements.plot);
    elements.table.closest("details")?.addEventListener("toggle", this.#fillTable);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    if (this.#series) this.#place();
    else this.#elements.plot.textContent = scene.view.place ? "" : WORDS.choosePlace;
  }

  /** @param {import("../api.js").Series|null} series */
  give(series) {
    if (series && !this.#series) this.#elements.plot.textContent = "";
    this.#series = series;
    this.#fillTable();
    this.#elements.line.hidden = !series;
    if (series) this.#place();
  }

  /** The day at this place as a text table. */
  textTable() {
    const { day } = this.#scene ?? {};
    if (this.#series) save(csvText(SERIES_HEADS, seriesRows(this.#series)), `skylag-${day.day}-${this.#series.lat}-${this.#series.lon}-day.csv`, "text/csv");
  }

  /** The delay compared with, where it is of this place. */
  #other() {
    const { otherSeries, view } = this.#scene;
    return view.versus && view.ask === "past" && otherSeries && otherSeries.place === this.#series.place.join() ? otherSeries : null;
  }

  close() {
    this.#watcher.disconnect();
    this.#elements.table.closest("details")?.removeEventListener("toggle", this.#fillTable);
    erase(this.#elements.plot);
  }

  /** The line of now moves at once; the plot is drawn anew only when something else than time changed. */
  #place() {
    const { day, time, view, theme } = this.#scene;
    const { plot, line } = this.#elements;
    const series = this.#series;
    const half = day.times.length > 1 ? (day.times[1] - day.times[0]) / 2 : 0;
    const span = /** @type {[number, number]} */ ([day.times[0] - half, day.times[day.times.length - 1] + half]);
    const part = (time - span[0]) / (span[1] - span[0]);
    line.style.transform = `translateX(${LEFT + part * (this.#size[0] - LEFT) - 1}px)`;
    const at = nearest(series.times, time);
    plot.setAttribute(
      "aria-label",
      WORDS.seriesAbout(placeText(series.lat, series.lon), withSigma(series.delay[at], series.sigma[at], "m"), timeText(time)),
    );
    const [width, height] = this.#size;
    const other = this.#other();
    const key = JSON.stringify([series.lat, series.lon, day.region.key, day.day, view.clock, theme, width, height, other?.label]);
    if (key === this.#drawn || !width) return;
    this.#drawn = key;
    this.#elements.note.textContent = other ? WORDS.dashedIs(other.label) : "";
    this.#fillTable();
    const figure = seriesFigure({ series, other: other?.delay ?? null, theme, clock: view.clock, zone: day.region.timezone, span, top: day.ends.delay[1], width });
    draw(plot, figure).catch(() => {
      this.#drawn = "";
    });
  }

  #fillTable = () => {
    const { table } = this.#elements;
    if (!table.closest("details")?.open || !this.#series || !this.#scene) {
      table.replaceChildren();
      return;
    }
    const { view, day } = this.#scene;
    const how = { clock: view.clock, zone: day.region.timezone };
    const series = this.#series;
    const other = this.#other();
    const body = make("tbody");
    series.times.forEach((ms, i) => {
      body.append(
        make("tr", {},
          make("th", { scope: "row", text: timeText(ms, how) }),
          make("td", { class: "number", text: withSigma(series.delay[i], series.sigma[i], "m") }),
          ...(other ? [make("td", { class: "number", text: `${fixed(other.delay[i], 2)} m` })] : []),
          make("td", { class: "number", text: withSigma(series.slope[i], series.slopeSigma[i], "mm/km", 1) }),
        ),
      );
    });
    table.replaceChildren(
      make("table", {},
        make("thead", {}, make("tr", {}, make("th", { scope: "col", text: HEADS.series[0] }), make("th", { scope: "col", class: "number", text: WORDS.verticalDelay }), ...(other ? [make("th", { scope: "col", class: "number", text: other.label })] : []), make("th", { scope: "col", class: "number", text: HEADS.series[1] }))),
        body,
      ),
    );
  };
}
