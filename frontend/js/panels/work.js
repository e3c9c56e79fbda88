/**
 * What the day means for work at a site: survey windows, or approaches of an aerodrome; with sheet and calendar.
 */

import * as api from "../api.js";
import { shareText, spanText, VERDICT_WORDS, WORDS } from "../words.js";
import { make, trouble } from "./parts.js";

export class WorkPanel {
  #details;
  #body;
  #scene = null;
  #drawn = "";
  #asking = null;
  #job = { method: "rtk", km: 10 };

  /** @param {HTMLDetailsElement} details @param {HTMLElement} body */
  constructor(details, body) {
    this.#details = details;
    this.#body = body;
    details.addEventListener("toggle", this.#open);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    this.#details.hidden = !this.#site();
    this.#open();
  }

  close() {
    this.#asking?.abort();
    this.#details.removeEventListener("toggle", this.#open);
  }

  #site() {
    const { view, day } = this.#scene;
    return view.place && day.sites.find((s) => Math.abs(s.lat - view.place[0]) < 5e-4 && Math.abs(s.lon - view.place[1]) < 5e-4);
  }

  #open = () => {
    const site = this.#scene && this.#site();
    if (!site || !this.#details.open) return;
    const { view, day } = this.#scene;
    const key = JSON.stringify([view.region, day.day, site.name, view.clock, this.#job]);
    if (key === this.#drawn) return;
    this.#drawn = key;
    this.#load(site);
  };

  async #load(site) {
    const { view, day } = this.#scene;
    const flies = site.kind === "aerodrome";
    this.#asking?.abort();
    this.#asking = new AbortController();
    const how = { signal: this.#asking.signal };
    this.#body.setAttribute("aria-busy", "true");
    if (!this.#body.children.length) this.#body.append(make("p", { class: "empty", text: WORDS.working }));
    try {
      const found = flies ? await api.approaches(view.region, day.day, site.name, how) : await api.survey(view.region, day.day, site.name, this.#job, how);
      const parts = flies ? this.#approaches(found) : this.#survey(found);
      this.#body.replaceChildren(make("h3", { text: flies ? WORDS.approachesAt(site.name) : WORDS.surveyAt(site.name) }), ...(flies ? [] : [this.#form()]), ...parts,
        make("p", { class: "exports" }, ...[["sheet", WORDS.files.sheet], ["sheet.pdf", WORDS.files.pdf], [flies ? "approaches.ics" : "survey.ics", WORDS.files.calendar]].map(([file, text]) => make("a", { href: api.siteFile(view.region, day.day, site.name, file, flies ? null : this.#job), text }))),
        make("details", {}, make("summary", { text: WORDS.assumptions }), make("ul", {}, ...found.assumptions.map((text) => make("li", { text })))));
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#drawn = "";
      this.#body.replaceChildren(trouble(error, () => this.#open()));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #form() {
    const method = make("select", {}, ...Object.entries(WORDS.methods).map(([value, text]) => make("option", { value, text, selected: value === this.#job.method })));
    const km = make("input", { type: "number", min: 1, max: 500, value: this.#job.km, size: 4 });
    const change = () => {
      this.#job = { method: method.value, km: Math.min(500, Math.max(1, Number(km.value) || 10)) };
      this.#open();
    };
    method.addEventListener("change", change);
    km.addEventListener("change", change);
    return make("p", { class: "job" }, make("label", {}, WORDS.method, " ", method), make("label", {}, WORDS.baseline, " ", km, " km"));
  }

  #span({ start, end }) {
    const { view, day } = this.#scene;
    return spanText(start, end, { clock: view.clock, zone: day.region.timezone });
  }

  #survey({ windows }) {
    return [list(windows.map((one) => make("li", {}, make("strong", { text: `${this.#span(one)}: ${VERDICT_WORDS[one.verdict] ?? one.verdict}` }), ` ${one.why}`)), WORDS.noWindows)];
  }

  #approaches({ levels, share, outages }) {
    const most = 6;
    return [
      make("dl", { class: "numbers" }, ...levels.map((name) => make("div", {}, make("dt", { text: name }), make("dd", { text: WORDS.ofTheDay(shareText(share[name])) })))),
      list(outages.slice(0, most).map((one) => make("li", {}, make("strong", { text: `${this.#span(one)}: ${one.level}` }), ` ${one.why}`)), WORDS.noOutages),
      ...(outages.length > most ? [make("p", { class: "fine", text: WORDS.more(outages.length - most) })] : []),
    ];
  }
}

/** @param {Node[]} items @param {string} none */
const list = (items, none) => (items.length ? make("ul", {}, ...items) : make("p", { class: "empty", text: none }));
