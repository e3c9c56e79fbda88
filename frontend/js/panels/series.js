/**
 * The delay of the chosen place over the day: a plot that shares its time axis with the strip, and a table behind it.
 */

import { draw, erase } from "../drawing.js";
import { seriesFigure } from "../figures/series.js";
import { nearest } from "../figures/strip.js";
import { placeText, timeText, withSigma, WORDS } from "../words.js";
import { make } from "./parts.js";

export class SeriesPanel {
  #elements;
  #scene = null;
  #series = null;
  #watcher;
  #drawing = false;
  #again = false;

  /** @param {{plot: HTMLElement, table: HTMLElement}} elements */
  constructor(elements) {
    this.#elements = elements;
    this.#watcher = new ResizeObserver(() => this.#series && this.#paint());
    this.#watcher.observe(elements.plot);
    elements.table.closest("details")?.addEventListener("toggle", this.#fillTable);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    if (this.#series) this.#paint();
    else this.#elements.plot.textContent = scene.view.place ? "" : WORDS.choosePlace;
  }

  /** @param {import("../api.js").Series|null} series */
  give(series) {
    if (series && !this.#series) this.#elements.plot.textContent = "";
    this.#series = series;
    this.#fillTable();
    if (series) this.#paint();
  }

  close() {
    this.#watcher.disconnect();
    this.#elements.table.closest("details")?.removeEventListener("toggle", this.#fillTable);
    erase(this.#elements.plot);
  }

  async #paint() {
    if (this.#drawing) {
      this.#again = true;
      return;
    }
    this.#drawing = true;
    try {
      do {
        this.#again = false;
        const { day, time, theme, view } = this.#scene;
        const half = day.times.length > 1 ? (day.times[1] - day.times[0]) / 2 : 0;
        const series = this.#series;
        const at = nearest(series.times, time);
        this.#elements.plot.setAttribute(
          "aria-label",
          `Vertical delay at ${placeText(series.lat, series.lon)} over the day; ${withSigma(series.delay[at], series.sigma[at], "m")} at ${timeText(time)}.`,
        );
        await draw(
          this.#elements.plot,
          seriesFigure({
            series,
            time,
            theme,
            clock: view.clock,
            zone: day.region.timezone,
            span: [day.times[0] - half, day.times[day.times.length - 1] + half],
            top: day.ends.delay[1],
            width: this.#elements.plot.clientWidth,
          }),
        );
      } while (this.#again);
    } finally {
      this.#drawing = false;
    }
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
    const body = make("tbody");
    series.times.forEach((ms, i) => {
      body.append(
        make("tr", {},
          make("th", { scope: "row", text: timeText(ms, how) }),
          make("td", { class: "number", text: withSigma(series.delay[i], series.sigma[i], "m") }),
          make("td", { class: "number", text: withSigma(series.slope[i], series.slopeSigma[i], "mm/km", 1) }),
        ),
      );
    });
    table.replaceChildren(
      make("table", {},
        make("thead", {}, make("tr", {}, make("th", { scope: "col", text: "Time" }), make("th", { scope: "col", class: "number", text: "Vertical delay" }), make("th", { scope: "col", class: "number", text: "Slope" }))),
        body,
      ),
    );
  };
}
