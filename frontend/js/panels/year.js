/**
 * Past: the stored days of a span as a strip, filtered by site, season and worst state; and the day to compare with.
 */

import { csvText, save, YEAR_HEADS } from "../exporting.js";
import { chosenDays, sharesOf, SEASONS, yearFigure } from "../figures/year.js";
import { FIELD } from "../state.js";
import { dayText, FIELD_WORDS, fixed, HEADS, monthText, SEASON_WORDS, shareText, STATE_WORDS, WORDS } from "../words.js";
import { draft, make, stateWord } from "./parts.js";

export class YearPanel {
  #elements;
  #state;
  #days = [];
  #scene = null;
  #figure = null;
  #drawn = "";
  #told = "";
  #width = 0;
  #filled = "";
  #watcher;

  /**
   * @param {Record<"strip"|"marks"|"who"|"span"|"worst"|"field"|"table"|"note"|"versus"|"how", any>} elements
   * @param {import("../state.js").State} state
   */
  constructor(elements, state) {
    this.#elements = elements;
    this.#state = state;
    const { strip, who, span, worst, field, table, versus, how } = elements;
    strip.addEventListener("click", this.#click);
    strip.addEventListener("keydown", this.#key);
    for (const [element, name] of [[who, "who"], [span, "span"], [worst, "worst"], [field, "field"]]) {
      element.addEventListener("change", () => state.change({ [name]: element.value }, { step: "none" }));
    }
    versus.addEventListener("change", () => state.change({ versus: versus.value }));
    how.addEventListener("change", (event) => state.change({ beside: event.target.value === "beside" }));
    table.closest("details").addEventListener("toggle", () => this.#fillTable());
    this.#watcher = new ResizeObserver(() => {
      this.#width = strip.clientWidth;
      if (this.#scene) this.show(this.#scene);
    });
    this.#watcher.observe(strip);
  }

  /** @param {import("../api.js").DayEntry[]} days */
  days(days) {
    this.#days = days;
    this.#drawn = this.#filled = this.#told = "";
    if (this.#scene) this.show(this.#scene);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    const { view, day } = scene;
    if (view.ask !== "past") return;
    // A step in time concerns nothing here, and asking for sizes would cost a layout of the page each time.
    const told = JSON.stringify([view.region, day.day, view.who, view.span, view.worst, view.field, view.versus, view.beside, this.#width]);
    if (told === this.#told) return;
    this.#told = told;
    const { strip, who, span, worst, field, versus, how, note } = this.#elements;
    const here = this.#days.filter((entry) => entry.region === view.region);
    const sites = [...new Set(here.flatMap((entry) => Object.keys(entry.siteShares)))];
    const fill = JSON.stringify([view.region, sites, here.length, view.day]);
    if (fill !== this.#filled) {
      this.#filled = fill;
      const years = [...new Set(here.map((entry) => entry.day.slice(0, 4)))].sort();
      who.replaceChildren(make("option", { value: "", text: WORDS.wholeRegion }), ...sites.map((text) => make("option", { value: text, text })));
      span.replaceChildren(
        make("option", { value: "", text: WORDS.allDays }),
        ...years.map((text) => make("option", { value: text, text })),
        ...Object.keys(SEASONS).map((value) => make("option", { value, text: SEASON_WORDS[value] })),
      );
      field.replaceChildren(...["", ...FIELD].map((value) => make("option", { value, text: FIELD_WORDS[value] })));
      field.disabled = !here.some((entry) => Number.isFinite(entry.kp));
      versus.replaceChildren(
        make("option", { value: "", text: WORDS.noOther }),
        make("option", { value: "quiet", text: WORDS.quietDays }),
        ...here.filter((entry) => entry.day !== view.day).map((entry) => make("option", { value: entry.day, text: dayText(entry.day) })),
      );
    }
    who.value = sites.includes(view.who) ? view.who : "";
    span.value = view.span;
    worst.value = view.worst;
    field.value = view.field;
    versus.value = view.versus;
    how.hidden = !view.versus;
    for (const input of how.querySelectorAll("input")) input.checked = (input.value === "beside") === view.beside;
    const chosen = chosenDays(here, view, who.value);
    const width = this.#width;
    const key = JSON.stringify([chosen.map((entry) => entry.day), who.value, width, here.length]);
    if (key !== this.#drawn && width) {
      this.#drawn = key;
      this.#draw(chosen, who.value, width);
      this.#fillTable();
    }
    note.textContent = `${chosen.length ? WORDS.yearSpan(chosen.length, here.length) : WORDS.noSuchDay}${field.disabled ? ` ${WORDS.noActivity}` : ""}`;
    const number = this.#figure?.columns.findIndex((column) => column.entry.day === day.day) ?? -1;
    for (const [i, mark] of [...strip.querySelectorAll(".day-mark")].entries()) mark.classList.toggle("chosen", i === number);
    const column = this.#figure?.columns[number];
    strip.setAttribute("aria-valuemax", String(Math.max(0, chosen.length - 1)));
    strip.setAttribute("aria-valuenow", String(Math.max(0, number)));
    strip.setAttribute("aria-valuetext", column ? sentence(column) : `${dayText(day.day)}, ${WORDS.notAmongThese}`);
  }

  close() {
    this.#watcher.disconnect();
    this.#elements.strip.replaceChildren();
  }

  #draw(chosen, who, width) {
    const { strip } = this.#elements;
    const figure = yearFigure({ entries: chosen, who, width });
    this.#figure = figure;
    const height = figure.height + 18;
    const svg = draft("svg", { width, height, viewBox: `0 0 ${width} ${height}`, "aria-hidden": "true" });
    svg.append(draft("path", { class: "tick", d: `M0 ${figure.slopeHeight + 0.5}H${figure.width}`, fill: "none" }));
    for (const column of figure.columns) {
      const gap = column.width > 4 ? 1 : 0;
      svg.append(
        draft("g", { class: "day-mark" },
          draft("title", { text: sentence(column) }),
          draft("rect", { class: "day-hit", x: column.x, y: 0, width: column.width, height: figure.height }),
          draft("rect", { class: "day-slope", x: column.x + gap, y: column.y, width: Math.max(1, column.width - 2 * gap), height: column.tall }),
          draft("rect", { class: `edge-${column.state}`, x: column.x + gap / 2, y: figure.slopeHeight + 4, width: Math.max(1, column.width - gap), height: figure.stateHeight, fill: `url(#pattern-${column.state})` }),
          // The part of a good day that nobody saw is not good: it takes its share of the box.
          ...(column.state === "holds" && column.unseen >= 0.01
            ? [draft("rect", { class: "edge-unseen", x: column.x + gap / 2, y: figure.slopeHeight + 4 + figure.stateHeight * (1 - column.unseen), width: Math.max(1, column.width - gap), height: figure.stateHeight * column.unseen, fill: "url(#pattern-unseen)" })]
            : []),
          draft("path", { class: "day-pointer", d: `M${column.x + column.width / 2} ${figure.slopeHeight + 2}V0m-4.5 0h9l-4.5 7z` }),
        ),
      );
    }
    for (const mark of figure.marks) svg.append(draft("text", { x: Math.min(mark.x, Math.max(0, width - 58)), y: height - 3, text: monthText(mark.month) }));
    this.#elements.marks.textContent = `${WORDS.slopeTo} ${fixed(figure.top, 0)} mm/km`;
    strip.replaceChildren(svg);
  }

  #fillTable() {
    const { table, who } = this.#elements;
    if (!table.closest("details").open || !this.#figure) return;
    const heads = HEADS.year;
    const body = make("tbody");
    for (const { entry, state } of [...this.#figure.columns].reverse()) {
      const shares = sharesOf(entry, who.value) ?? {};
      body.append(
        make("tr", {},
          make("th", { scope: "row" }, make("button", { type: "button", class: "linklike", text: dayText(entry.day), click: () => this.#state.change({ day: entry.day, minute: null }) })),
          make("td", {}, stateWord(state)),
          ...["broken", "strained", "unseen"].map((name) => make("td", { class: "number", text: shareText(shares[name]) })),
          make("td", { class: "number", text: Number.isFinite(entry.slope) ? `${fixed(entry.slope, 1)} mm/km` : "–" }),
          make("td", { class: "number", text: fixed(entry.kp, 1) }),
          make("td", { class: "number", text: fixed(entry.ap, 0) }),
          make("td", { class: "number", text: entry.flags }),
        ),
      );
    }
    table.replaceChildren(
      make("table", {}, make("caption", { text: WORDS.yearCaption }),
        make("thead", {}, make("tr", {}, ...heads.map((text, i) => make("th", { scope: "col", text, class: i > 1 ? "number" : undefined })))), body),
    );
  }

  /** The days shown as a text table. */
  textTable() {
    const { who } = this.#elements;
    const rows = (this.#figure?.columns ?? []).map(({ entry, state }) => {
      const shares = sharesOf(entry, who.value) ?? {};
      return [entry.day, state, ...["broken", "strained", "unseen"].map((name) => shares[name] ?? null), entry.slope, entry.kp, entry.ap, entry.flags];
    });
    save(csvText(YEAR_HEADS, rows), `skylag-days-${this.#scene.view.region.toLowerCase().replace(/[^\p{L}\p{N}]+/gu, "-")}.csv`, "text/csv");
  }

  #open(column) {
    if (column) this.#state.change({ day: column.entry.day, minute: null });
  }

  #click = (event) => {
    const x = event.clientX - this.#elements.strip.getBoundingClientRect().left;
    const distance = (column) => Math.abs(column.x + column.width / 2 - x);
    const [near] = [...(this.#figure?.columns ?? [])].sort((a, b) => distance(a) - distance(b));
    if (near && distance(near) < Math.max(12, near.width)) this.#open(near);
  };

  #key = (event) => {
    const columns = this.#figure?.columns ?? [];
    const at = columns.findIndex((column) => column.entry.day >= this.#scene.day.day);
    const last = columns.length - 1;
    const here = at < 0 ? last : at;
    const goal = { ArrowLeft: here - 1, ArrowDown: here - 1, ArrowRight: here + 1, ArrowUp: here + 1, Home: 0, End: last }[event.key];
    if (goal === undefined || event.altKey || event.ctrlKey || event.metaKey) return;
    event.preventDefault();
    const column = columns[Math.min(last, Math.max(0, goal))];
    if (column?.entry.day !== this.#scene.day.day) this.#open(column);
  };
}

function sentence({ entry, state, unseen }) {
  const dark = state !== "unseen" && unseen >= 0.01 ? `, ${WORDS.partUnseen(shareText(unseen))}` : "";
  const slope = Number.isFinite(entry.slope) ? `, ${WORDS.slopeUpTo(fixed(entry.slope, 0))}` : "";
  const kp = Number.isFinite(entry.kp) ? `, ${WORDS.kp(fixed(entry.kp, 1))}` : "";
  return `${dayText(entry.day)}: ${STATE_WORDS[state].name}${dark}${slope}${kp}`;
}
