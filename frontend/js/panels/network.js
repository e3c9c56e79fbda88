/**
 * Network: what each receiver gave day by day, how its biases went, and who disagrees with the others.
 */

import * as api from "../api.js";
import { csvText, NETWORK_HEADS, save } from "../exporting.js";
import { median } from "../figures/year.js";
import { asSentence, dayText, fixed, HEADS, PAGE_WORDS, shareText, withSigma, WORDS } from "../words.js";
import { draft, make, tableOf, trouble } from "./parts.js";

/**
 * A receiver disagrees where the others' field misses it by this many times the median miss, and of what that field
 * itself says it may miss by: it knows less of a receiver that is far from all others.
 */
const FAR = 2;

export class NetworkPanel {
  #elements;
  #state;
  #days = null;
  #region = "";
  #shown = "";
  #asking = null;

  /** @param {{said: HTMLElement, table: HTMLElement, csv: HTMLElement, days: HTMLElement}} elements @param {import("../state.js").State} state */
  constructor(elements, state) {
    this.#elements = elements;
    this.#state = state;
    elements.csv.addEventListener("click", this.#take);
    elements.days.closest("details").addEventListener("toggle", () => this.#fillDays());
  }

  /** @param {import("../main.js").Scene} scene */
  show({ view, day }) {
    if (view.ask !== "network") return;
    if (this.#region !== view.region) {
      this.#region = view.region;
      this.#days = null;
      this.#load(view.region, view.day);
    }
    const key = JSON.stringify([view.region, view.day, this.#days?.length]);
    if (!this.#days || key === this.#shown) return;
    this.#shown = key;
    this.#draw(day.day);
  }

  /** Days came or went: ask again when next shown. */
  renew() {
    this.#region = this.#shown = "";
  }

  close() {
    this.#asking?.abort();
    this.#elements.csv.removeEventListener("click", this.#take);
  }

  /** What each receiver gave on the chosen day, as a text table. */
  #take = () => {
    const date = this.#state.view.day;
    const today = this.#days?.find((one) => one.day === date);
    const rows = (today?.receivers ?? []).map((one) => [date, one.name, one.received, one.gaps, one.slips, one.arcs, one.level, one.leftOut,
      one.biases.map((bias) => `${bias.pair} ${bias.value.toFixed(3)} +- ${bias.sigma.toFixed(3)}`).join("; "), one.faults.join(" ")]);
    save(csvText(NETWORK_HEADS, rows), `skylag-receivers-${date}.csv`, "text/csv");
  };

  /** The table behind the small bars and points: every receiver on every day they show. */
  #fillDays() {
    const { days } = this.#elements;
    if (!days.closest("details").open || !this.#days) return;
    const names = [...new Set(this.#days.flatMap((one) => one.receivers.map((receiver) => receiver.name)))].sort();
    const rows = names.flatMap((name) => this.#days.map((one) => ({ day: one.day, found: one.receivers.find((receiver) => receiver.name === name) })).filter(({ found }) => found)
      .map(({ day, found }) => [name, day, shareText(found.received), plain(found.gaps), plain(found.slips), Number.isFinite(found.leftOut) ? `${fixed(found.leftOut, 1)} TECU` : "–", found.biases.map((bias) => `${bias.pair} ${withSigma(bias.value, bias.sigma, "ns")}`).join("; ")]));
    days.replaceChildren(tableOf({ label: PAGE_WORDS.allTheseDays, heads: HEADS.networkDays, rows, numbers: [2, 3, 4, 5] }));
  }

  async #load(region, day) {
    this.#asking?.abort();
    this.#asking = new AbortController();
    this.#elements.said.textContent = WORDS.loadingNetwork;
    this.#elements.table.replaceChildren();
    try {
      this.#days = await api.network(region, { signal: this.#asking.signal });
      this.#shown = "";
      this.#draw(this.#state.view.day || day);
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#region = "";
      this.#elements.said.textContent = "";
      this.#elements.table.replaceChildren(trouble(error, () => this.#load(region, day)));
    }
  }

  #draw(date) {
    const { said, table } = this.#elements;
    const days = [...this.#days].reverse();
    const today = days.find((one) => one.day === date);
    if (!today) {
      said.textContent = WORDS.noNetworkDay;
      table.replaceChildren();
      return;
    }
    const usual = median(today.receivers.map((one) => one.leftOut));
    const rows = today.receivers.map((one) => ({ ...one, far: usual > 0 && one.leftOut > FAR * Math.max(usual, Number.isFinite(one.leftOutSigma) ? one.leftOutSigma : 0) }));
    rows.sort((a, b) => Number(b.faults.length > 0) - Number(a.faults.length > 0) || Number(b.far) - Number(a.far) || (a.name < b.name ? -1 : 1));
    const loud = rows.filter((one) => one.faults.length || one.far).map((one) => one.name);
    said.textContent = `${dayText(date)}: ${WORDS.disagree(loud, rows.length, Number.isFinite(usual))}`;
    const history = (name, pick) => days.map((one) => ({ day: one.day, value: pick(one.receivers.find((r) => r.name === name)) }));
    const count = (name, one, field) => [plain(one[field]), bars(history(name, (r) => r?.[field] ?? NaN), date)];
    const body = make("tbody");
    for (const one of rows) {
      body.append(
        make("tr", { class: one.faults.length || one.far ? "loud" : undefined },
          make("th", { scope: "row" }, one.name, ...(one.far ? [make("small", { text: WORDS.disagrees })] : [])),
          cell(HEADS.network[1], shareText(one.received), bars(history(one.name, (r) => r?.received ?? NaN), date, 1)),
          cell(HEADS.network[2], ...count(one.name, one, "gaps")),
          cell(HEADS.network[3], ...count(one.name, one, "slips")),
          cell(HEADS.network[4], plain(one.arcs)),
          cell(HEADS.network[5], Number.isFinite(one.level) ? `${fixed(one.level, 2)} TECU` : "–"),
          cell(HEADS.network[6], Number.isFinite(one.leftOut) ? `${fixed(one.leftOut, 1)} TECU` : "–", bars(history(one.name, (r) => r?.leftOut ?? NaN), date)),
          make("td", { class: "biases", "data-head": HEADS.network[7] },
            ...(one.biases.length
              ? one.biases.map((bias) => make("p", {}, make("small", { text: bias.pair }), ` ${withSigma(bias.value, bias.sigma, "ns")} `, track(history(one.name, (r) => r?.biases.find((b) => b.pair === bias.pair)?.value ?? NaN), bias.sigma, date)))
              : ["–"])),
          make("td", { "data-head": HEADS.network[8], "data-none": !one.faults.length }, ...one.faults.map((text) => make("p", { text: asSentence(text) }))),
        ),
      );
    }
    const heads = HEADS.network;
    this.#fillDays();
    table.replaceChildren(
      make("table", {}, make("caption", { text: WORDS.networkCaption(days.length) }),
        make("thead", {}, make("tr", {}, ...heads.map((text, i) => make("th", { scope: "col", text, class: i > 0 && i < 7 ? "number" : undefined })))), body),
    );
  }
}

const plain = (value) => (Number.isFinite(value) ? String(value) : "–");
const cell = (head, text, picture) => make("td", { class: "number", "data-head": head }, text, ...(picture ? [" ", picture] : []));

/** One bar per day, the present one in ink. @param {{day: string, value: number}[]} history @param {string} now @param {number} [top] */
function bars(history, now, top = Math.max(1, ...history.map((one) => one.value).filter(Number.isFinite))) {
  if (history.filter((one) => Number.isFinite(one.value)).length < 2) return "";
  const step = Math.max(1.5, Math.min(6, 72 / history.length));
  const width = Math.ceil(step * history.length);
  return draft("svg", { class: "spark", width, height: 18, viewBox: `0 0 ${width} 18`, "aria-hidden": "true" },
    draft("title", { text: WORDS.overDays(history.length) }),
    draft("path", { class: "tick", d: `M0 17.5H${width}` }),
    ...history.map(({ day, value }, i) => {
      const tall = Number.isFinite(value) ? Math.max(1, (value / top) * 16) : 0;
      return draft("rect", { class: day === now ? "bar now" : "bar", x: i * step, y: 17 - tall, width: Math.max(1, step - 0.8), height: tall });
    }));
}

/** A value over days about its median; the frame is never narrower than three of its sigmas to either side. */
function track(history, sigma, now) {
  const values = history.map((one) => one.value).filter(Number.isFinite);
  if (values.length < 2) return "";
  const middle = median(values);
  const half = Math.max(3 * (sigma || 0.1), ...values.map((v) => Math.abs(v - middle)));
  const width = 72;
  const x = (i) => (history.length > 1 ? 2 + (i / (history.length - 1)) * (width - 4) : width / 2);
  const y = (v) => 9 - ((v - middle) / half) * 7;
  return draft("svg", { class: "spark", width, height: 18, viewBox: `0 0 ${width} 18`, "aria-hidden": "true" },
    draft("title", { text: `${WORDS.overDays(history.length)}: ${fixed(Math.min(...values), 2)} … ${fixed(Math.max(...values), 2)} ns` }),
    draft("path", { class: "tick", d: `M0 9H${width}` }),
    ...history.map(({ day, value }, i) => (Number.isFinite(value) ? draft("circle", { class: day === now ? "bar now" : "bar", cx: x(i), cy: y(value), r: day === now ? 3 : 1.6 }) : draft("g"))));
}
