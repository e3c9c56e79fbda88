/**
 * The curves behind what is said of a place: lines of sight of several receivers to the same satellites.
 */

import * as api from "../api.js";
import { curvesFigure, DASHES } from "../figures/curves.js";
import { fixed, HEADS, hourText, timeText, withSigma, WORDS } from "../words.js";
import { draft, make, trouble } from "./parts.js";

const HALF = 45 * 60000;

export class CurvesPanel {
  #details;
  #body;
  #scene = null;
  #drawn = "";
  #soon = 0;
  #asking = null;

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
    if (this.#details.open) this.#open();
  }

  close() {
    clearTimeout(this.#soon);
    this.#asking?.abort();
    this.#details.removeEventListener("toggle", this.#open);
  }

  /** Ask when the hand rests. */
  #open = () => {
    if (!this.#details.open || !this.#scene?.view.place) return;
    const { view, time, day } = this.#scene;
    const key = JSON.stringify([view.region, day.day, view.place, time, view.clock]);
    if (key === this.#drawn) return;
    clearTimeout(this.#soon);
    this.#asking?.abort();
    this.#soon = window.setTimeout(() => this.#load(key), 250);
  };

  async #load(key) {
    const { view, time, day } = this.#scene;
    this.#asking = new AbortController();
    this.#body.setAttribute("aria-busy", "true");
    try {
      const lines = await api.witnesses(view.region, day.day, view.place, time, { signal: this.#asking.signal });
      this.#drawn = key;
      this.#draw(lines, time, { clock: view.clock, zone: day.region.timezone });
    } catch (error) {
      if (error?.name !== "AbortError") this.#body.replaceChildren(trouble(error, () => this.#load(key)));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #draw(lines, time, how) {
    if (!lines.length) {
      this.#body.replaceChildren(make("p", { class: "empty", text: WORDS.noCurves }));
      return;
    }
    const span = /** @type {[number, number]} */ ([time - HALF, time + HALF]);
    const width = Math.max(220, this.#body.clientWidth || 300);
    const height = 96;
    const { charts, x } = curvesFigure({ lines, span, width, height });
    const out = [make("p", { class: "fine", text: WORDS.curvesAbout })];
    for (const chart of charts) {
      const svg = draft("svg", { class: "curves", width, height, viewBox: `0 0 ${width} ${height}`, role: "img", "aria-label": WORDS.curvesOf(chart.satellite, chart.lines.map(({ line }) => `${line.receiver} ${fixed(line.change, 2)} m`).join(", ")) });
      for (const mark of chart.marks) svg.append(draft("path", { class: "grid", d: `M34 ${mark.y}H${width}` }), draft("text", { x: 30, y: mark.y + 4, "text-anchor": "end", text: mark.text }));
      svg.append(draft("path", { class: "moment", d: `M${x(time)} 2V${height - 14}` }));
      for (const [ms, anchor] of [[span[0], "start"], [time, "middle"], [span[1], "end"]]) svg.append(draft("text", { x: x(ms), y: height - 2, "text-anchor": anchor, text: hourText(ms, how.clock === "local" ? how.zone : "UTC") }));
      for (const { path, dash } of chart.lines) svg.append(draft("path", { class: "curve", d: path, "stroke-dasharray": dash || undefined }));
      const key = make("ul", { class: "curve-key" });
      chart.lines.forEach(({ line }, i) => {
        key.append(make("li", {}, draft("svg", { width: 30, height: 10, "aria-hidden": "true" }, draft("path", { class: "curve", d: "M1 5H29", "stroke-dasharray": DASHES[i] || undefined })), ` ${line.receiver}, ${Math.round(line.distance)} km`));
      });
      out.push(make("div", { class: "curve-box" }, make("h3", { text: `${chart.satellite}: ${WORDS.verticalDelayM}` }), svg, key));
    }
    const body = make("tbody");
    for (const line of lines) {
      const known = line.delay.filter(Number.isFinite);
      body.append(make("tr", {},
        make("th", { scope: "row", text: `${line.satellite} ${line.receiver}` }),
        make("td", { class: "number", text: withSigma(known[0], line.sigma, "m") }),
        make("td", { class: "number", text: withSigma(known[known.length - 1], line.sigma, "m") }),
        make("td", { class: "number", text: `${fixed(line.change, 2)} m` }),
        make("td", { class: "number", text: `${Math.round(line.elevation)}°` })));
    }
    const table = make("details", { class: "table-behind" }, make("summary", { text: WORDS.asTable }),
      make("div", { class: "scroll", tabindex: 0, role: "region", "aria-label": WORDS.curvesTable },
        make("table", {}, make("caption", { text: WORDS.curvesCaption(lines.length, timeText(span[0], how), timeText(span[1], how)) }),
          make("thead", {}, make("tr", {}, ...HEADS.curves.map((text, i) => make("th", { scope: "col", text, class: i ? "number" : undefined })))), body)));
    const { view, day } = this.#scene;
    const file = `${api.dayFile(view.region, day.day, "slant.csv")}?${new URLSearchParams({ lat: String(view.place[0]), lon: String(view.place[1]), time: new Date(time).toISOString(), minutes: String(HALF / 60000), reach_km: "250" })}`;
    this.#body.replaceChildren(...out, table, make("p", { class: "fine" }, make("a", { href: file, download: "", text: WORDS.curvesFile })));
  }
}
