/**
 * What the day means for work at a site: survey windows, or approaches of an aerodrome; with sheet and calendar.
 */

import * as api from "../api.js";
import { shareText, spanText, VERDICT_WORDS, WORDS, GROUND_WORDS } from "../words.js";
import { hourTable, jobForm, serviceForm, USUAL_JOB, USUAL_SERVICE, whyForm } from "./job.js";
import { make, trouble } from "./parts.js";

export class WorkPanel {
  #details;
  #body;
  #scene = null;
  #drawn = "";
  #asking = null;
  /** @type {Record<string, string>} */ #job = USUAL_JOB;
  /** @type {Record<string, string>} */ #service = USUAL_SERVICE;
  #open_ = { rare: () => false, service: false };

  /** @param {HTMLDetailsElement} details @param {HTMLElement} body */
  constructor(details, body) {
    this.#details = details;
    this.#body = body;
    details.addEventListener("toggle", this.#open);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    this.#details.hidden = !scene.view.place;
    this.#open();
  }

  close() {
    this.#asking?.abort();
    this.#details.removeEventListener("toggle", this.#open);
  }

  /** The site at the chosen place, or the place itself. */
  #site() {
    const { view, day } = this.#scene;
    const [lat, lon] = view.place ?? [];
    if (!view.place) return null;
    return day.sites.find((s) => Math.abs(s.lat - lat) < 5e-4 && Math.abs(s.lon - lon) < 5e-4) ?? { name: "", kind: "", lat, lon };
  }

  #open = () => {
    const site = this.#scene && this.#site();
    if (!site || !this.#details.open) return;
    const { view, day } = this.#scene;
    const key = JSON.stringify([view.region, day.day, site, view.clock, this.#job, this.#service]);
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
      // A job is at a site or at places: never both.
      const job = site.name && !this.#job.places ? { ...this.#job, site: site.name } : { ...this.#job, places: this.#job.places || `${site.lat},${site.lon}` };
      const service = { ...this.#service, site: site.name };
      const found = flies ? await api.approaches(view.region, day.day, service, how) : await api.survey(view.region, day.day, job, how);
      const ground = flies ? await api.ground(view.region, day.day, site.name, this.#scene.time, how) : null;
      const parts = flies ? this.#approaches(found, ground) : this.#survey(found);
      const words = flies ? service : job;
      this.#body.replaceChildren(make("h3", { text: flies ? WORDS.approachesAt(site.name) : WORDS.surveyAt(found.name) }), ...(flies ? [] : [this.#form()]), ...parts,
        make("p", { class: "exports" }, ...[["sheet", WORDS.files.sheet], ["sheet.pdf", WORDS.files.pdf], [flies ? "approaches.ics" : "survey.ics", WORDS.files.calendar]].map(([file, text]) => make("a", { href: api.siteFile(view.region, day.day, file, words), text }))),
        ...(flies ? [serviceForm(this.#service, (service) => { this.#service = service; this.#open_.service = true; this.#open(); }, this.#open_.service)] : [whyForm(view.region, day.day, job, this.#scene.time)]),
        make("details", {}, make("summary", { text: WORDS.assumptions }), make("ul", {}, ...[...found.assumptions, ...(ground?.assumptions ?? [])].map((text) => make("li", { text })))));
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#drawn = "";
      this.#body.replaceChildren(trouble(error, () => this.#open()));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #form() {
    const { form, isOpen } = jobForm(this.#job, (job) => {
      this.#job = job;
      this.#open();
    }, this.#open_.rare());
    this.#open_.rare = isOpen;
    return form;
  }

  #span({ start, end }) {
    const { view, day } = this.#scene;
    return spanText(start, end, { clock: view.clock, zone: day.region.timezone });
  }

  #survey(found) {
    const { windows } = found;
    const { view, day } = this.#scene;
    return [list(windows.map((one) => make("li", {}, make("strong", { text: `${this.#span(one)}: ${VERDICT_WORDS[one.verdict] ?? one.verdict}` }), ` ${one.why}`)), WORDS.noWindows), ...hourTable(found, { clock: view.clock, zone: day.region.timezone })];
  }

  #approaches({ levels, share, outages }, ground) {
    const most = 6;
    return [
      make("dl", { class: "numbers" }, ...levels.map((name) => make("div", {}, make("dt", { text: name }), make("dd", { text: WORDS.ofTheDay(shareText(share[name])) })))),
      list(outages.slice(0, most).map((one) => make("li", {}, make("strong", { text: `${this.#span(one)}: ${one.level}` }), ` ${one.why}`)), WORDS.noOutages),
      ...(outages.length > most ? [make("p", { class: "fine", text: WORDS.more(outages.length - most) })] : []),
      make("p", { class: "fine", text: GROUND_WORDS.day(ground.minutes) }),
      ...(ground.next ? [make("p", { class: "fine", text: GROUND_WORDS.next(ground.next) })] : []),
    ];
  }
}

/** @param {Node[]} items @param {string} none */
const list = (items, none) => (items.length ? make("ul", {}, ...items) : make("p", { class: "empty", text: none }));
