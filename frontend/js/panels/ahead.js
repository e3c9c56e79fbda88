/**
 * Ahead: the outlook for the two days after the newest, at the chosen place: advice first, hours second.
 */

import * as api from "../api.js";
import { dateText, fixed, placeText, shareText, timeText, WORDS } from "../words.js";
import { draft, make, trouble } from "./parts.js";

export class AheadPanel {
  #body;
  #drawn = "";
  #asking = null;
  #scene = null;

  /** @param {HTMLElement} body */
  constructor(body) {
    this.#body = body;
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    const { view } = scene;
    if (view.ask !== "ahead" || !view.place) return;
    const key = JSON.stringify([view.region, view.place, view.clock]);
    if (key !== this.#drawn) this.#load(key);
  }

  /** Days came or went: ask again when next shown. */
  renew() {
    this.#drawn = "";
  }

  close() {
    this.#asking?.abort();
  }

  async #load(key) {
    const { view } = this.#scene;
    this.#drawn = key;
    this.#asking?.abort();
    this.#asking = new AbortController();
    this.#body.setAttribute("aria-busy", "true");
    if (!this.#body.children.length) this.#body.append(make("p", { class: "empty", text: WORDS.working }));
    try {
      this.#draw(await api.outlook(view.region, view.place, { signal: this.#asking.signal }));
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#drawn = "";
      this.#body.replaceChildren(make("p", { class: "network-said", text: WORDS.noOutlook }), trouble(error, () => this.show(this.#scene)));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #draw(found) {
    const { view, day } = this.#scene;
    const how = { clock: view.clock, zone: day.region.timezone };
    const when = (ms) => `${dateText(ms, how.clock === "local" ? how.zone : "UTC")}, ${timeText(ms, how)}`;
    const heads = ["Hour", "Vertical delay", "95 in 100 within", "Slope, 95 of 100 under", "Strained", "Broken", "Storm phase"];
    const body = make("tbody");
    found.hours.forEach((ms, i) => {
      body.append(make("tr", {}, make("th", { scope: "row", class: "nowrap", text: when(ms) }),
        make("td", { class: "number", text: `${fixed(found.delay[i], 2)} m` }),
        make("td", { class: "number", text: `${fixed(found.low[i], 2)} – ${fixed(found.high[i], 2)} m` }),
        make("td", { class: "number", text: Number.isFinite(found.slope[i]) ? `${fixed(found.slope[i], 1)} mm/km` : "–" }),
        make("td", { class: "number", text: shareText(found.strained[i]) }), make("td", { class: "number", text: shareText(found.broken[i]) }),
        make("td", { text: found.phase[i] })));
    });
    this.#body.replaceChildren(
      make("p", { class: "network-said", text: found.windows.length ? WORDS.firstSpan(when(found.windows[0].end), found.windows[0].kind) : WORDS.noOutlook }),
      make("p", { class: "fine", text: WORDS.outlookFor(found.name || placeText(found.lat, found.lon), found.use, found.knownUntil, found.seenDays) }),
      chances(found, when),
      make("ul", { class: "spans" }, ...found.windows.map((one) => make("li", {}, make("strong", { text: `${when(one.start)} – ${timeText(one.end, how)}` }), `: ${one.kind}, ${WORDS.chances(shareText(one.strained), shareText(one.broken))}`))),
      make("p", { class: "fine", text: found.advice.join(" ") }),
      make("details", { class: "table-behind" }, make("summary", { text: WORDS.asTable }), make("div", { class: "scroll", tabindex: 0, role: "region", "aria-label": WORDS.hourByHour },
        make("table", {}, make("thead", {}, make("tr", {}, ...heads.map((text, i) => make("th", { scope: "col", text, class: i && i < 6 ? "number" : undefined })))), body))),
      make("details", {}, make("summary", { text: WORDS.basis }), make("ul", {}, ...found.basis.map((text) => make("li", { text })))),
    );
  }
}

/** The hours as columns: full height is certain; the broken part stands on the ground, the strained on it. */
function chances(found, when) {
  const [width, tall] = [960, 72];
  const step = width / Math.max(1, found.hours.length);
  const svg = draft("svg", { class: "chances", viewBox: `0 0 ${width} ${tall + 18}`, role: "img", "aria-label": WORDS.chancesAbout });
  for (const part of [0, 0.5, 1]) svg.append(draft("path", { class: "grid", d: `M0 ${tall - part * tall + 0.5}H${width}` }));
  found.hours.forEach((ms, i) => {
    const broken = (found.broken[i] || 0) * tall;
    const strained = Math.max(broken, (found.strained[i] || 0) * tall);
    svg.append(draft("g", {}, draft("title", { text: `${when(ms)}: ${WORDS.chances(shareText(found.strained[i]), shareText(found.broken[i]))}` }),
      draft("rect", { x: i * step + 1, y: 0, width: step - 2, height: tall, fill: "transparent" }),
      draft("rect", { x: i * step + 1, y: tall - strained, width: step - 2, height: strained - broken, fill: "url(#pattern-strained)" }),
      draft("rect", { x: i * step + 1, y: tall - broken, width: step - 2, height: broken, fill: "url(#pattern-broken)" })));
    if (i % 6 === 0) svg.append(draft("text", { x: i * step + 1, y: tall + 15, text: when(ms).split(", ").pop() }));
  });
  return svg;
}
