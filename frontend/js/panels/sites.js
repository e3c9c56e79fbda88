/**
 * The sites of a region: as a table, to add, change and take away, one by one or from a list. Never judges a place.
 */

import * as api from "../api.js";
import { dateText, latText, lonText, SITE_WORDS } from "../words.js";
import { make, trouble } from "./parts.js";
import { degrees } from "./reading.js";

export class SitesPanel {
  #details;
  #body;
  #changed;
  #scene = null;
  #found = null;
  #region = "";
  #editing = "";
  #said = /** @type {Node[]} */ ([]);

  /** @param {HTMLDetailsElement} details @param {HTMLElement} body @param {() => void} changed  the sites are others now */
  constructor(details, body, changed) {
    this.#details = details;
    this.#body = body;
    this.#changed = changed;
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    if (!this.#details.open || scene.view.region === this.#region) return;
    this.#region = scene.view.region;
    this.#editing = "";
    this.#said = [];
    this.#ask(() => api.sites(this.#region), false);
  }

  /** Do something that gives the sites as they are then. @param {() => Promise<any>} what @param {boolean} changes */
  async #ask(what, changes) {
    this.#body.setAttribute("aria-busy", "true");
    try {
      this.#found = await what();
      this.#said = this.#found.problems.length
        ? [make("p", { text: SITE_WORDS.leftOut(this.#found.problems.length) }), make("ul", {}, ...this.#found.problems.slice(0, 20).map((one) => make("li", { text: SITE_WORDS.line(one.line, one.what) })))]
        : [];
      if (changes) {
        this.#editing = "";
        this.#changed();
      }
      this.#draw();
      if (changes) this.#body.querySelector("input")?.focus();
    } catch (error) {
      const again = () => this.#ask(what, changes);
      if (!this.#found) this.#region = "";
      if (this.#body.querySelector("form")) this.#body.querySelector(".said")?.replaceChildren(trouble(error, error.status === 401 ? again : null));
      else this.#body.replaceChildren(trouble(error, again));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #draw() {
    const { sites, writing, history } = this.#found;
    const may = writing !== "nobody";
    this.#body.replaceChildren(
      sites.length ? this.#table(sites, may) : make("p", { class: "empty", text: SITE_WORDS.none }),
      make("div", { class: "said", role: "status" }, ...this.#said),
      ...(may ? [this.#form(sites.find((one) => one.name === this.#editing) ?? null), this.#list()] : [make("p", { class: "fine", text: SITE_WORDS.nobody })]),
      ...(history.length ? [make("details", {}, make("summary", { text: SITE_WORDS.changed }), make("ul", {}, ...history.map((one) => make("li", { text: `${dateText(one.made, "UTC")}: ${one.said}` }))))] : []),
    );
  }

  #table(sites, may) {
    const body = make("tbody");
    for (const one of sites) {
      const buttons = may
        ? make("td", { class: "nowrap" },
            make("button", { type: "button", class: "linklike", text: SITE_WORDS.edit, "aria-label": SITE_WORDS.editOf(one.name), click: () => this.#edit(one.name) }), " ",
            make("button", { type: "button", class: "linklike", text: SITE_WORDS.remove, "aria-label": SITE_WORDS.removeOf(one.name), click: () => this.#remove(one.name) }))
        : "";
      body.append(make("tr", {}, make("th", { scope: "row", text: one.name }), make("td", { text: one.kind }),
        make("td", { class: "number" }, make("span", { text: `${latText(one.lat)},` }), " ", make("span", { text: lonText(one.lon) }), one.onMap ? "" : `, ${SITE_WORDS.offMap}`), ...(may ? [buttons] : [])));
    }
    return make("div", { class: "scroll", tabindex: 0, role: "region", "aria-label": SITE_WORDS.about }, make("table", {}, body));
  }

  #edit(name) {
    this.#editing = name;
    this.#said = [];
    this.#draw();
    const first = /** @type {HTMLInputElement|null} */ (this.#body.querySelector("input[name=name]"));
    first?.focus();
    first?.select();
  }

  #remove(name) {
    const box = this.#body.querySelector(".said");
    const sure = make("button", { type: "button", text: SITE_WORDS.removeOf(name), click: () => this.#ask(() => api.removeSite(this.#region, name, this.#found.revision), true) });
    box?.replaceChildren(make("p", { text: SITE_WORDS.sure(name) }), sure, " ", make("button", { type: "button", text: SITE_WORDS.leave, click: () => box.replaceChildren() }));
    sure.focus();
  }

  #form(site) {
    const input = (name, value, size) => make("input", { name, value, size, autocomplete: "off", required: true });
    const kinds = make("datalist", { id: "site-kinds" }, ...SITE_WORDS.kinds.map((value) => make("option", { value })));
    const lat = input("lat", site ? latText(site.lat, 4) : "", 9);
    const lon = input("lon", site ? lonText(site.lon, 4) : "", 9);
    const name = input("name", site?.name ?? "", 18);
    const kind = make("input", { name: "kind", value: site?.kind ?? "site", size: 10, list: "site-kinds", autocomplete: "off" });
    const wrong = make("p", { class: "field-error", role: "alert" });
    const here = make("button", { type: "button", text: SITE_WORDS.here, click: () => {
      const place = this.#scene?.view.place;
      if (place) [lat.value, lon.value] = [latText(place[0], 4), lonText(place[1], 4)];
    } });
    const save = (event) => {
      event.preventDefault();
      const place = [degrees(lat.value, "S"), degrees(lon.value, "W")];
      wrong.textContent = place.every(Number.isFinite) ? "" : SITE_WORDS.degrees;
      if (wrong.textContent) return;
      this.#ask(() => api.putSite(this.#region, { name: name.value, lat: place[0], lon: place[1], kind: kind.value, was: site?.name ?? "", after: this.#found.revision }), true);
    };
    return make("form", { class: "job-form site-form", submit: save },
      make("h3", { text: site ? SITE_WORDS.change(site.name) : SITE_WORDS.add }),
      make("div", { class: "job" }, make("label", {}, SITE_WORDS.name, " ", name), make("label", {}, SITE_WORDS.lat, " ", lat), make("label", {}, SITE_WORDS.lon, " ", lon), make("label", {}, SITE_WORDS.kind, " ", kind, kinds)),
      wrong,
      make("button", { text: SITE_WORDS.save }), " ", here,
      ...(site ? [" ", make("button", { type: "button", text: SITE_WORDS.leave, click: () => { this.#editing = ""; this.#draw(); } })] : []));
  }

  #list() {
    const file = make("input", { type: "file", accept: ".csv,.txt,.tsv,.json,.geojson", change: async () => {
      const chosen = file.files?.[0];
      if (chosen) this.#ask(() => api.takeInSites(this.#region, chosen, this.#found.revision), true);
    } });
    return make("p", { class: "job" }, make("label", {}, SITE_WORDS.list, " ", file));
  }
}
