/**
 * Ahead: the outlook for the two days after the newest, at the chosen place: advice first, hours with their spread
 * second, and how outlooks turned out.
 */

import * as api from "../api.js";
import { calendarText, csvText, OUTLOOK_HEADS, outlookRows, save } from "../exporting.js";
import { outlookFigure } from "../figures/outlook.js";
import { AHEAD_WORDS, countText, dateText, fixed, placeText, shareText, timeText, WORDS } from "../words.js";
import { draft, make, tableOf, trouble } from "./parts.js";

export class AheadPanel {
  #body;
  #state;
  #drawn = "";
  #asking = null;
  #scene = null;
  #found = null;
  #chart = make("div", { class: "outlook-chart" });
  #watcher;
  #uses = { key: "", list: /** @type {{name: string}[]} */ ([]) };

  /** @param {HTMLElement} body @param {import("../state.js").State} state */
  constructor(body, state) {
    this.#body = body;
    this.#state = state;
    this.#watcher = new ResizeObserver(() => this.#found && this.#drawChart());
    this.#watcher.observe(this.#chart);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    const { view } = scene;
    if (view.ask !== "ahead" || !view.place) return;
    const key = JSON.stringify([view.region, view.place, view.clock, view.use]);
    if (key !== this.#drawn) this.#load(key);
  }

  /** Days came or went: ask again when next shown. */
  renew() {
    this.#drawn = "";
  }

  close() {
    this.#asking?.abort();
    this.#watcher.disconnect();
  }

  async #load(key) {
    const { view, day } = this.#scene;
    this.#drawn = key;
    this.#asking?.abort();
    this.#asking = new AbortController();
    const how = { signal: this.#asking.signal };
    this.#body.setAttribute("aria-busy", "true");
    if (!this.#body.children.length) this.#body.append(make("p", { class: "empty", text: WORDS.working }));
    try {
      if (this.#uses.key !== `${view.region} ${day.day}`) this.#uses = { key: `${view.region} ${day.day}`, list: await api.uses(view.region, day.day, how) };
      const use = this.#uses.list.some((one) => one.name === view.use) ? view.use : "";
      const found = await api.outlook(view.region, view.place, use, how);
      // The record is asked for after the outlook: asking for that scores what came due.
      const [last, all] = await Promise.all([api.outlookRecord(view.region, 1, how), api.outlookRecord(view.region, 120, how)]);
      this.#draw(found, last, all);
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#drawn = "";
      this.#found = null;
      this.#body.replaceChildren(make("p", { class: "network-said", text: WORDS.noOutlook }), trouble(error, () => this.show(this.#scene)));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #when(ms) {
    const { view, day } = this.#scene;
    return `${dateText(ms, view.clock === "local" ? day.region.timezone : "UTC")}, ${timeText(ms, { clock: view.clock, zone: day.region.timezone })}`;
  }

  #draw(found, last, all) {
    this.#found = found;
    const { day } = this.#scene;
    const where = found.name || placeText(found.lat, found.lon);
    const name = `skylag-outlook-${found.knownUntil}-${where.toLowerCase().replace(/[^\p{L}\p{N}]+/gu, "-")}`;
    const use = make("select", { id: "ahead-use" }, ...this.#uses.list.map((one) => make("option", { value: one.name, text: one.name, selected: one.name === found.use })));
    use.addEventListener("change", () => this.#state.change({ use: use.value }));
    const spans = found.windows.map((one) =>
      make("li", {}, make("strong", { text: `${this.#when(one.start)} – ${this.#when(one.end)}` }), `: ${one.kind}, ${WORDS.chances(one.strained, one.broken)}`));
    this.#body.replaceChildren(
      make("p", { class: "network-said", text: found.windows.length ? WORDS.firstSpan(this.#when(found.windows[0].end), found.windows[0].kind) : WORDS.noOutlook }),
      make("p", { class: "job" }, make("label", {}, AHEAD_WORDS.for, " ", use)),
      make("p", { class: "fine", text: WORDS.outlookFor(where, found.use, found.knownUntil, found.seenDays) }),
      this.#chart,
      make("ul", { class: "spans" }, ...spans),
      make("p", { class: "fine", text: found.advice.join(" ") }),
      make("p", { class: "exports" }, WORDS.takeAway,
        make("button", { type: "button", class: "linklike", id: "ahead-csv", text: AHEAD_WORDS.hoursCsv, click: () => save(csvText(OUTLOOK_HEADS, outlookRows(found)), `${name}.csv`, "text/csv") }),
        make("button", { type: "button", class: "linklike", id: "ahead-ics", text: AHEAD_WORDS.windowsIcs, click: () => save(calendarText(found.windows.map((one) => ({ start: one.start, end: one.end, summary: `${where}: ${one.kind}`, about: `${found.use}. ${WORDS.chances(one.strained, one.broken)}. ${day.caution}` })), Date.now()), `${name}.ics`, "text/calendar") }),
        make("button", { type: "button", class: "linklike", text: WORDS.print, click: () => window.print() })),
      make("details", { class: "table-behind" }, make("summary", { text: WORDS.asTable }), tableOf({
        label: WORDS.hourByHour, heads: AHEAD_WORDS.heads, numbers: [1, 2, 3, 4, 5],
        rows: found.hours.map((ms, i) => [this.#when(ms), `${fixed(found.delay[i], 2)} m`, `${fixed(found.ranges["95"]?.low[i], 2)} – ${fixed(found.ranges["95"]?.high[i], 2)} m`,
          Number.isFinite(found.slope[i]) ? `${fixed(found.slope[i], 1)} mm/km` : "–", chanceText(found.strained[i]), chanceText(found.broken[i]), found.phase[i]]),
      })),
      make("details", {}, make("summary", { text: WORDS.basis }), make("ul", {}, ...found.basis.map((text) => make("li", { text })))),
      record(last, all, found.use),
    );
    this.#drawChart();
  }

  #drawChart() {
    const width = this.#chart.clientWidth;
    const { view, day } = this.#scene;
    if (!width) return;
    const figure = outlookFigure({ outlook: this.#found, width, zone: view.clock === "local" ? day.region.timezone : "UTC" });
    const { left, delayHeight, base } = figure;
    const svg = draft("svg", { class: "chances", width, height: figure.height, viewBox: `0 0 ${width} ${figure.height}`, role: "img", "aria-label": `${AHEAD_WORDS.chartAbout(this.#when(figure.span[0]), this.#when(figure.span[1]))} ${WORDS.chancesAbout}` });
    for (const mark of figure.marks) svg.append(draft("path", { class: "grid", d: `M${left} ${mark.y}H${width}` }), draft("text", { x: left - 5, y: mark.y + 4, "text-anchor": "end", text: `${fixed(mark.value, mark.value % 1 ? 1 : 0)} m` }));
    for (const part of figure.parts) svg.append(draft("path", { class: "grid", d: `M${left} ${part.y}H${width}` }), draft("text", { x: left - 5, y: part.y + 4, "text-anchor": "end", text: `${100 * part.value} %` }));
    for (const tick of figure.ticks) {
      svg.append(draft("path", { class: tick.day ? "tick" : "grid", d: `M${tick.x} 4V${delayHeight}M${tick.x} ${delayHeight + 22}V${base + 4}` }), draft("text", { x: tick.x + 2, y: base + 16, text: tick.text }));
      if (tick.day) svg.append(draft("text", { class: "day-name", x: tick.x + 2, y: base + 30, text: tick.day }));
    }
    for (const one of figure.bands) svg.append(draft("path", { class: `spread spread-${one.share}`, d: one.path }));
    svg.append(draft("path", { class: "curve", d: figure.line }));
    figure.columns.forEach((one, i) => {
      const { ranges } = this.#found;
      const words = `${this.#when(one.ms)}: ${fixed(this.#found.delay[i], 2)} m (${fixed(ranges["95"]?.low[i], 2)} – ${fixed(ranges["95"]?.high[i], 2)}), ${WORDS.chances(this.#found.strained[i], this.#found.broken[i])}`;
      svg.append(draft("g", {}, draft("title", { text: words }), draft("rect", { x: one.x, y: 0, width: one.width, height: base, fill: "transparent" }),
        ...(one.unknown ? [draft("rect", { class: "unknown", x: one.x, y: one.unknown.y, width: one.width, height: one.unknown.tall, fill: "url(#pattern-unseen)" })] : [
        draft("rect", { x: one.x + 0.5, y: one.strained.y, width: Math.max(1, one.width - 1), height: one.strained.tall, fill: "url(#pattern-strained)" }),
        draft("rect", { x: one.x + 0.5, y: one.broken.y, width: Math.max(1, one.width - 1), height: one.broken.tall, fill: "url(#pattern-broken)" })])));
    });
    this.#chart.replaceChildren(make("p", { class: "fine", text: AHEAD_WORDS.chartKey }), svg);
  }
}

const chanceText = (share) => (Number.isFinite(share) ? shareText(share) : WORDS.chanceUnknown);

/** How outlooks turned out, the last one first; for the use that is asked. */
function record(last, all, use) {
  const words = AHEAD_WORDS;
  const box = make("section", { class: "record", "aria-labelledby": "record-title" }, make("h3", { id: "record-title", text: words.record }));
  if (!all.outlooks) {
    box.append(make("p", { class: "empty", text: words.noRecord }));
    return box;
  }
  const names = Object.keys(words.beside);
  const best = last.leads["1"];
  if (best) {
    const others = names.filter((name) => best.against[name]).map((name) => `${words.beside[name]} ${fixed(best.against[name].other_rms, 2)} m`);
    box.append(make("p", { class: "record-said", text: words.lastOne(fixed(best.rms_m, 2), others.join(", "), shareText(best.inside["95"])) }));
  }
  const leads = ["1", "2"].filter((lead) => all.leads[lead]);
  const row = (text, pick) => [text, ...leads.map((lead) => pick(all.leads[lead]))];
  box.append(make("p", { class: "fine", text: words.over(countText(all.outlooks, "outlook")) }),
    tableOf({ label: words.record, heads: [words.off, ...leads.map((lead) => words.leads[lead])], numbers: [1, 2], rows: [
      row(words.own, (one) => `${fixed(one.rms_m, 2)} m`),
      ...names.map((name) => row(words.beside[name], (one) => (one.against[name] ? `${fixed(one.against[name].other_rms, 2)} m` : "–"))),
      row(words.crps, (one) => `${fixed(one.crps_m, 2)} m`),
      ...["50", "80", "95"].map((share) => row(words.inside(share), (one) => shareText(one.inside[share]))),
      row(words.cases, (one) => String(one.hours)),
    ] }));
  for (const [level, one] of Object.entries(all.states[use] ?? {})) {
    if (!one.cases) continue;
    box.append(make("details", {}, make("summary", { text: words.reliability(level, use) }),
      make("p", { class: "fine", text: words.brier(fixed(one.brier, 4), fixed(one.brier_frequency, 4), fixed(one.brier_persistence, 4)) }),
      tableOf({ label: words.reliability(level, use), heads: words.tenths, numbers: [0, 1, 2], rows: one.tenths.map((tenth) => [String(tenth.cases), shareText(tenth.told), shareText(tenth.came)]) })));
  }
  return box;
}
