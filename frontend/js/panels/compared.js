/**
 * A published map beside the day: chosen from the reader's own files, sent with the question and not kept. Sentences,
 * the hours as a table, and the difference of one hour as a map.
 */

import * as api from "../api.js";
import { ramp, roundEnd } from "../colour.js";
import { COMPARED_WORDS as SAY } from "../compared_words.js";
import { fixed } from "../words.js";
import { make, tableOf, trouble } from "./parts.js";

export class ComparedPanel {
  #body;
  #scene = null;
  #file = null;
  #found = null;
  #key = "";
  #asking = null;
  #input = make("input", { type: "file", id: "beside-file", change: () => this.#chosen() });
  #answer = make("div", { role: "status" });
  #canvas = make("canvas", { width: 340, height: 280, role: "img" });
  #line = make("p", { class: "fine" });
  #hour = make("input", { type: "range", min: 0, max: 0, value: 0, step: 1, input: () => this.#paint() });

  /** @param {HTMLElement} body */
  constructor(body) {
    this.#body = body;
    body.replaceChildren(make("p", { class: "fine", text: SAY.about }), make("p", { class: "job" }, make("label", {}, SAY.choose, " ", this.#input)), this.#answer);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    if (this.#key && this.#key !== this.#dayKey()) {
      this.#found = null;
      this.#answer.replaceChildren();
      if (this.#file) this.#load();
    } else if (this.#found) this.#paint();
  }

  close() {
    this.#asking?.abort();
  }

  #dayKey() {
    return `${this.#scene.view.region} ${this.#scene.day.day}`;
  }

  #chosen() {
    this.#file = this.#input.files?.[0] ?? null;
    if (this.#file && this.#scene) this.#load();
  }

  async #load() {
    this.#asking?.abort();
    this.#asking = new AbortController();
    this.#key = this.#dayKey();
    this.#body.setAttribute("aria-busy", "true");
    this.#answer.replaceChildren(make("p", { class: "empty", text: SAY.asking }));
    try {
      this.#found = await api.beside(this.#scene.view.region, this.#scene.day.day, this.#file, { signal: this.#asking.signal });
      this.#draw();
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#found = null;
      this.#answer.replaceChildren(trouble(error, () => this.#load()));
    } finally {
      this.#body.setAttribute("aria-busy", "false");
    }
  }

  #draw() {
    const { said, hours, starts } = this.#found;
    this.#hour.max = String(starts.length - 1);
    this.#hour.value = String(Math.floor(starts.length / 2));
    const rows = starts.map((_start, i) => [this.#clock(i), String(hours.cells[i]), fixed(hours.mean[i], 2), fixed(hours.rms[i], 2)]);
    this.#answer.replaceChildren(
      make("ul", {}, ...said.map((text) => make("li", { text }))),
      make("label", {}, SAY.hour, " ", this.#hour), this.#canvas, this.#line,
      make("details", {}, make("summary", { text: SAY.hours }), tableOf({ label: SAY.hours, heads: SAY.heads, rows, numbers: [1, 2, 3] })),
    );
    this.#paint();
  }

  #clock(i) {
    return new Date(this.#found.starts[i]).toISOString().slice(11, 16);
  }

  /** One hour's cells; the same colours for all hours. */
  #paint() {
    const { lats, lons, difference } = this.#found;
    const which = Number(this.#hour.value);
    const size = lats.length * lons.length;
    const cells = difference.subarray(which * size, (which + 1) * size);
    const end = roundEnd(difference.reduce((most, v) => (Number.isFinite(v) ? Math.max(most, Math.abs(v)) : most), 0));
    const colours = ramp("difference", this.#scene.theme);
    const ctx = this.#canvas.getContext("2d");
    const [wide, high] = [this.#canvas.width / lons.length, this.#canvas.height / lats.length];
    ctx.clearRect(0, 0, this.#canvas.width, this.#canvas.height);
    let sum = 0;
    let count = 0;
    cells.forEach((value, at) => {
      if (!Number.isFinite(value)) return;
      sum += value;
      count += 1;
      const step = Math.round(((value / end + 1) / 2) * (colours.length - 1));
      ctx.fillStyle = colours[Math.min(colours.length - 1, Math.max(0, step))];
      const row = lats.length - 1 - Math.floor(at / lons.length);
      ctx.fillRect((at % lons.length) * wide, row * high, Math.ceil(wide), Math.ceil(high));
    });
    const sentence = SAY.map(this.#clock(which), count ? sum / count : NaN);
    this.#canvas.setAttribute("aria-label", sentence);
    this.#hour.setAttribute("aria-valuetext", `${this.#clock(which)} UTC`);
    this.#line.textContent = `${sentence} ${SAY.ends(end)}`;
  }
}
