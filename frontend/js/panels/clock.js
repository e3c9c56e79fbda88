/**
 * The day strip, the range control and the day picker: everything that moves time.
 */

import { STATES } from "../colour.js";
import { keyStep, nearest, stepOf, stripFigure } from "../figures/strip.js";
import { asSentence, HEADS, KIND_WORDS, siteSentence, spanText, timeText, WORDS, zoneName } from "../words.js";
import { draft, make, stateWord } from "./parts.js";

/**
 * The rows of the strip: the sites, and last the chosen place.
 * @param {import("../main.js").Scene} scene
 */
function rowsOf({ siteStates, series, day }) {
  const codes = series ? day.times.map((ms) => STATES.indexOf(series.state[nearest(series.times, ms)])) : day.times.map(() => -1);
  return [...(siteStates?.rows ?? []), { name: WORDS.thisPlace, codes, reasons: [] }];
}

export class ClockPanel {
  #elements;
  #state;
  #watcher;
  #scene = null;
  #figure = null;
  #drawn = "";
  #line = null;
  #dragging = false;
  #width = 0;
  #speaking = 0;

  /**
   * @param {{strip: HTMLElement, names: HTMLElement, range: HTMLInputElement, hint: HTMLElement, table: HTMLElement, text: HTMLElement, reason: HTMLElement}} elements
   * @param {import("../state.js").State} state
   */
  constructor(elements, state) {
    this.#elements = elements;
    this.#state = state;
    const { strip, names, range } = elements;
    strip.addEventListener("keydown", this.#key);
    strip.addEventListener("pointerdown", this.#down);
    strip.addEventListener("pointermove", this.#move);
    strip.addEventListener("pointerup", this.#up);
    strip.addEventListener("pointercancel", this.#up);
    strip.addEventListener("focus", this.#speakSoon);
    range.addEventListener("input", this.#range);
    names.addEventListener("click", this.#name);
    elements.table.closest("details").addEventListener("toggle", () => this.#fillTable());
    this.#watcher = new ResizeObserver(() => {
      this.#width = strip.clientWidth;
      if (this.#scene) this.show(this.#scene);
    });
    this.#watcher.observe(strip);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    const { day, series, siteStates, time, view } = scene;
    const { strip, range, text } = this.#elements;
    const zone = day.region.timezone;
    const rows = rowsOf(scene);
    const width = this.#width;
    const fingerprint = JSON.stringify([day.region.key, day.day, rows.length, width, siteStates?.serial, zone, series?.lat, series?.lon]);
    if (fingerprint !== this.#drawn && width) {
      this.#drawn = fingerprint;
      this.#drawStrip(rows, width);
      this.#fillTable();
    }
    this.#names(rows);
    const minutes = Math.max(5, Math.round(stepOf(day.times) / 60000));
    this.#elements.hint.textContent = WORDS.stripHelp(minutes);
    const index = nearest(day.times, time);
    range.max = String(day.times.length - 1);
    range.value = String(index);
    const words = timeText(time, { clock: view.clock, zone });
    range.setAttribute("aria-valuetext", words);
    text.textContent = words;
    strip.setAttribute("aria-valuemax", String(day.times.length - 1));
    strip.setAttribute("aria-valuenow", String(index));
    strip.setAttribute("aria-valuetext", words);
    if (this.#line && this.#figure) this.#line.style.transform = `translateX(${this.#figure.x(time) - 1}px)`;
    this.#speakSoon();
  }

  close() {
    this.#watcher.disconnect();
    clearTimeout(this.#speaking);
    const { strip, names, range } = this.#elements;
    for (const [type, listener] of [["keydown", this.#key], ["pointerdown", this.#down], ["pointermove", this.#move], ["pointerup", this.#up], ["pointercancel", this.#up], ["focus", this.#speakSoon]]) {
      strip.removeEventListener(type, listener);
    }
    range.removeEventListener("input", this.#range);
    names.removeEventListener("click", this.#name);
  }

  #drawStrip(rows, width) {
    const { day } = this.#scene;
    const { strip, names } = this.#elements;
    const rowHeight = 21; // and 3 between: a name is a target of 24 pixels
    // The names take the room they need, and the map leaves the strip its room on the first screen.
    const longest = Math.max(...rows.map((row) => row.name.length), 0.86 * zoneName(day.region.timezone).length);
    const root = document.documentElement.style;
    root.setProperty("--names", `${Math.min(13, Math.max(6.5, 0.53 * longest + 0.8)).toFixed(1)}rem`);
    root.setProperty("--strip", `${Math.min(320, rows.length * (rowHeight + 3))}px`);
    names.style.setProperty("--row", `${rowHeight}px`);
    const figure = stripFigure({ rows, times: day.times, flags: day.flags, width, rowHeight, zone: day.region.timezone });
    this.#figure = figure;
    const local = day.region.timezone !== "UTC";
    const axis = local ? 34 : 20;
    const svg = draft("svg", { width, height: figure.height + axis, viewBox: `0 0 ${width} ${figure.height + axis}`, "aria-hidden": "true" });
    for (const bar of figure.bars) {
      svg.append(
        draft("rect", {
          x: bar.x + 0.5,
          y: bar.y + 0.5,
          width: Math.max(1, bar.width - 1),
          height: bar.height - 1,
          fill: `url(#pattern-${bar.state})`,
          class: `edge-${bar.state}`,
        }, draft("title", { text: siteSentence(rows[bar.row].name, bar.state, bar.reason) })),
      );
    }
    for (const mark of figure.marks) {
      svg.append(
        draft("rect", { x: mark.x, y: mark.y, width: mark.width, height: mark.height, class: `flag-mark ${mark.flag.state}` },
          draft("title", { text: KIND_WORDS[mark.flag.kind]?.name ?? mark.flag.kind })),
      );
    }
    const base = figure.height;
    svg.append(draft("path", { class: "tick", d: `M0 ${base + 0.5}H${width}`, fill: "none" }));
    for (const tick of figure.ticks) {
      svg.append(draft("path", { class: "tick", d: `M${tick.x} ${base}v${tick.major ? 6 : 3}`, fill: "none" }));
      if (!tick.major) continue;
      const anchor = tick.x < 16 ? "start" : tick.x > width - 16 ? "end" : "middle";
      svg.append(draft("text", { x: tick.x, y: base + 17, "text-anchor": anchor, text: tick.utc }));
      if (local) svg.append(draft("text", { x: tick.x, y: base + 31, "text-anchor": anchor, text: tick.local }));
    }
    this.#line = make("div", { class: "now-line" });
    this.#line.style.bottom = `${axis}px`;
    strip.replaceChildren(svg, this.#line);
  }

  /** The strip in words: one row for each run of equal state of a site. */
  #fillTable() {
    const { table } = this.#elements;
    if (!table.closest("details").open || !this.#scene || !this.#figure) return;
    const { day, view } = this.#scene;
    const how = { clock: view.clock, zone: day.region.timezone };
    const rows = rowsOf(this.#scene);
    const body = make("tbody");
    for (const bar of this.#figure.bars) {
      body.append(make("tr", {}, make("th", { scope: "row", text: rows[bar.row].name }), make("td", { class: "nowrap", text: spanText(Math.max(bar.from, day.times[0]), bar.to, how) }), make("td", {}, stateWord(bar.state)), make("td", { text: asSentence(bar.reason ?? "") })));
    }
    table.replaceChildren(make("table", {}, make("thead", {}, make("tr", {}, ...HEADS.strip.map((text) => make("th", { scope: "col", text })))), body));
  }

  #names(rows) {
    const { names } = this.#elements;
    const { day, view } = this.#scene;
    const here = view.place;
    const chosen = (site) => Boolean(here && site && Math.abs(site.lat - here[0]) < 5e-4 && Math.abs(site.lon - here[1]) < 5e-4);
    const key = JSON.stringify(rows.map((row) => row.name));
    if (names.dataset.key !== key) {
      names.dataset.key = key;
      names.replaceChildren(
        ...rows.map((row, number) => make("li", {}, number < day.sites.length ? make("button", { type: "button", "data-site": number, text: row.name, title: row.name }) : make("p", { text: row.name }))),
      );
      const zone = day.region.timezone;
      names.append(make("li", { class: "clock-name first", text: "UTC" }));
      if (zone !== "UTC") names.append(make("li", { class: "clock-name", text: zoneName(zone) }));
    }
    for (const button of names.querySelectorAll("button")) {
      button.setAttribute("aria-pressed", String(chosen(day.sites[Number(button.dataset.site)])));
    }
  }

  #go(index) {
    const { times, start } = this.#scene.day;
    this.#state.change({ minute: Math.round((times[index] - start) / 60000) });
  }

  #key = (event) => {
    if (!this.#scene || event.altKey || event.ctrlKey || event.metaKey) return;
    const { times } = this.#scene.day;
    const next = keyStep(event.key, event.shiftKey, nearest(times, this.#scene.time), times);
    if (next === null) return;
    event.preventDefault();
    this.#go(next);
  };

  #range = () => this.#scene && this.#go(Number(this.#elements.range.value));

  #down = (event) => {
    if (!this.#scene || event.button !== 0) return;
    this.#dragging = true;
    this.#elements.strip.setPointerCapture(event.pointerId);
    this.#to(event);
  };

  #move = (event) => this.#dragging && this.#to(event);

  #up = () => {
    this.#dragging = false;
  };

  #to(event) {
    const { from, to, width } = this.#figure;
    const part = (event.clientX - this.#elements.strip.getBoundingClientRect().left) / width;
    this.#go(nearest(this.#scene.day.times, from + Math.min(1, Math.max(0, part)) * (to - from)));
  }

  #name = (event) => {
    const button = event.target.closest("button[data-site]");
    if (!button) return;
    const site = this.#scene.day.sites[Number(button.dataset.site)];
    if (site) this.#state.change({ place: [site.lat, site.lon] });
  };

  /** The reason is read aloud when the hand rests, not at each step of a drag. */
  #speakSoon = () => {
    clearTimeout(this.#speaking);
    this.#speaking = setTimeout(() => {
      if (!this.#scene) return;
      const { siteStates, time } = this.#scene;
      if (!siteStates?.rows.length) {
        this.#elements.reason.textContent = WORDS.noSites;
        return;
      }
      const rank = { broken: 3, strained: 2, unseen: 1, holds: 0 };
      const said = siteStates.rows.map((row, number) => ({ name: row.name, state: siteStates.stateOf(number, time), reason: siteStates.reasonOf(number, time) }));
      const worst = said.filter((site) => site.state !== "holds").sort((a, b) => rank[b.state] - rank[a.state]);
      const words = worst.length
        ? siteSentence(worst[0].name, worst[0].state, worst[0].reason) + (worst.length > 1 ? ` ${WORDS.also(worst.slice(1).map((site) => site.name))}` : "")
        : WORDS.allHold;
      if (this.#elements.reason.textContent !== words) this.#elements.reason.textContent = words;
    }, 200);
  };
}
