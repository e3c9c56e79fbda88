/**
 * The head of the page and what surrounds the chart: region, day, clock, layer, day or night, exports, cautions.
 */

import * as api from "../api.js";
import { agoText, countText, dateText, dayText, LAYER_WORDS, timeText, WORDS, zoneName } from "../words.js";
import { toQuery } from "../state.js";
import { make } from "./parts.js";

export class MastheadPanel {
  #elements;
  #noted = null;
  #state;
  #days = [];
  #actions;
  #before = "day";

  /**
   * @param {Record<string, any>} elements
   * @param {import("../state.js").State} state
   * @param {{picture: (format: "png"|"svg") => Promise<void>, themeChanged: () => void}} actions
   */
  constructor(elements, state, actions) {
    this.#elements = elements;
    this.#state = state;
    this.#actions = actions;
    elements.day.addEventListener("change", () => this.#choose(elements.day.value));
    elements.before.addEventListener("click", () => this.#beside(-1));
    elements.after.addEventListener("click", () => this.#beside(1));
    elements.clock.addEventListener("change", (event) => state.change({ clock: event.target.value }));
    elements.layer.addEventListener("change", (event) => state.change({ layer: event.target.value }));
    elements.png.addEventListener("click", () => this.#picture("png"));
    elements.svg.addEventListener("click", () => this.#picture("svg"));
    for (const button of document.querySelectorAll("[data-print]")) button.addEventListener("click", () => window.print());
    elements.asks.addEventListener("click", this.#ask);
    elements.theme.addEventListener("click", this.#turn);
    window.matchMedia("(prefers-color-scheme: dark)").addEventListener("change", this.#system);
    window.addEventListener("beforeprint", this.#toPaper);
    window.addEventListener("afterprint", this.#fromPaper);
    this.#name();
  }

  /** @returns {import("../colour.js").Theme} */
  get theme() {
    return document.documentElement.dataset.theme === "night" ? "night" : "day";
  }

  /** @param {import("../api.js").DayEntry[]} days */
  days(days) {
    this.#days = days;
    const { day } = this.#elements;
    const regions = [...new Set(days.map((entry) => entry.region))];
    const options = (region) =>
      days
        .filter((entry) => entry.region === region)
        .sort((a, b) => (a.day < b.day ? 1 : -1))
        .map((entry) => make("option", { value: `${entry.region}/${entry.day}`, text: dayText(entry.day) }));
    day.replaceChildren(
      ...(regions.length > 1
        ? regions.map((region) => make("optgroup", { label: region }, ...options(region)))
        : regions.flatMap(options)),
    );
    day.disabled = !days.length;
    day.closest(".day-picker").hidden = !days.length;
  }

  /** What the day rests on, and its notes: two at once, all others behind a summary. @param {import("../api.js").Day} day */
  #note(day) {
    const { origin } = this.#elements;
    this.#noted = day;
    const more = day.warnings.slice(2);
    origin.replaceChildren([day.receivers.length ? `${countText(day.receivers.length, "receiver")}.` : "", ...day.warnings.slice(0, 2)].filter(Boolean).join(" "),
      ...(more.length ? [make("details", {}, make("summary", { text: WORDS.moreNotes(more.length) }), make("ul", {}, ...more.map((text) => make("li", { text }))))] : []));
  }

  /** @param {import("../main.js").Scene} scene */
  show({ view, day, time }) {
    const { name, before, after, clock, layer, simulated, age, origin, csv, geojson, netcdf, ionex, lines, asks } = this.#elements;
    for (const link of asks.querySelectorAll("a")) {
      if (link.dataset.ask === view.ask) link.setAttribute("aria-current", "page");
      else link.removeAttribute("aria-current");
      link.setAttribute("href", toQuery({ ...view, ask: link.dataset.ask, ...(link.dataset.ask === "now" ? { minute: null } : {}) }) || "?");
    }
    name.textContent = day.region.name;
    document.title = `${LAYER_WORDS[view.layer].name}, ${day.region.name}, ${day.day} – Skylag`;
    this.#elements.day.value = `${view.region}/${view.day}`;
    before.disabled = !this.#neighbour(-1);
    after.disabled = !this.#neighbour(1);
    for (const input of clock.querySelectorAll("input")) input.checked = input.value === view.clock;
    const zone = day.region.timezone;
    clock.hidden = zone === "UTC";
    clock.querySelector("input[value=local] + span").textContent = zoneName(zone);
    for (const input of layer.querySelectorAll("input")) input.checked = input.value === view.layer;
    this.#elements.caution.textContent = day.caution;
    simulated.hidden = !day.simulated;
    simulated.textContent = day.simulated ? WORDS.simulated : "";
    age.textContent = day.processed ? WORDS.written(agoText(Date.now() - day.processed)) : "";
    if (this.#noted !== day) this.#note(day);
    csv.href = api.flagsFile(view.region, view.day, "csv");
    geojson.href = api.flagsFile(view.region, view.day, "geojson");
    netcdf.href = api.dayFile(view.region, view.day, "field.nc");
    ionex.href = api.dayFile(view.region, view.day, "maps.inx");
    lines.href = api.linesFile(view.region, view.day, time);
  }

  close() {
    window.removeEventListener("beforeprint", this.#toPaper);
    window.removeEventListener("afterprint", this.#fromPaper);
    window.matchMedia("(prefers-color-scheme: dark)").removeEventListener("change", this.#system);
  }

  #neighbour(step) {
    const { region, day } = this.#state.view;
    const list = this.#days.filter((entry) => entry.region === region).map((entry) => entry.day).sort();
    return list[list.indexOf(day) + step] ?? null;
  }

  #beside(step) {
    const day = this.#neighbour(step);
    if (day) this.#state.change({ day });
  }

  #choose(value) {
    const cut = value.lastIndexOf("/");
    const region = value.slice(0, cut);
    const day = value.slice(cut + 1);
    this.#state.change(region === this.#state.view.region ? { day } : { region, day, place: null, minute: null });
  }

  /** A click on a question stays on the page; with a modifier the link opens as links do. */
  #ask = (event) => {
    const link = event.target.closest("a[data-ask]");
    if (!link || event.ctrlKey || event.metaKey || event.shiftKey) return;
    event.preventDefault();
    const ask = link.dataset.ask;
    this.#state.change(ask === "now" ? { ask, minute: null } : { ask });
  };

  #picture = async (format) => {
    const { announce } = this.#elements;
    const button = this.#elements[format];
    button.disabled = true;
    try {
      await this.#actions.picture(format);
    } catch (error) {
      announce.textContent = error.message;
    } finally {
      button.disabled = false;
    }
  };

  #turn = () => {
    const next = this.theme === "night" ? "day" : "night";
    try {
      localStorage.setItem("skylag.theme", next);
    } catch {
      // A browser that keeps nothing still turns the page for this visit.
    }
    this.#set(next);
  };

  /** Paper is light; the address leads back to this view. */
  #toPaper = () => {
    this.#before = this.theme;
    this.#elements.printed.textContent = WORDS.printed(dateText(Date.now()), timeText(Date.now()), window.location.href);
    if (this.#before === "night") this.#set("day");
  };

  #fromPaper = () => {
    if (this.#before === "night") this.#set("night");
  };

  #system = (event) => {
    try {
      if (localStorage.getItem("skylag.theme")) return;
    } catch {
      // no choice kept: follow the system
    }
    this.#set(event.matches ? "night" : "day");
  };

  #set(theme) {
    document.documentElement.dataset.theme = theme;
    this.#name();
    this.#actions.themeChanged();
  }

  #name() {
    const night = this.theme === "night";
    this.#elements.theme.setAttribute("aria-pressed", String(night));
  }
}
