/**
 * The legend beside the map: colours of the layer, patterns of the states, the drawn signs, and what to show.
 */

import { bareWarnings, dottedNumbers } from "../figures/map.js";
import { differenceEnds } from "../figures/compare.js";
import { legendFigure } from "../figures/legend.js";
import { KIND_WORDS, LAYER_WORDS, STATE_WORDS, WORDS } from "../words.js";
import { differs } from "./chart.js";
import { draft, make, swatch } from "./parts.js";

/** The signs of the chart in small. */
const SIGN_PATHS = {
  front: [["sign", "M2 14h30"], ["sign-thin", "M5 14v-7M10 14v-7M15 14v-7M20 14v-7M25 14v-7M30 14v-7"]],
  irregular: [["sign", "M3 5q3.5-4 7 0t7 0t7 0t7 0M3 10q3.5-4 7 0t7 0t7 0t7 0M3 15q3.5-4 7 0t7 0t7 0t7 0"]],
  slope: [["sign", "M4 15h26v-11z"]],
  fault: [["sign", "M3 11h13l3-7M15 14l3-6h13"]],
};

export class LegendPanel {
  #element;
  #state;
  #shown = "";
  /** @type {Record<string, boolean>} */ #folds = {};

  /** @param {HTMLElement} element @param {import("../state.js").State} state */
  constructor(element, state) {
    this.#element = element;
    this.#state = state;
    element.addEventListener("change", this.#toggle);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    const { view, day, theme, fields, index } = scene;
    const difference = differs(scene);
    const bare = difference ? [] : bareWarnings(fields, index, view.layer);
    const dots = !difference && dottedNumbers({ fields, index, layer: view.layer, unseenSigma: day.region.unseenSigma });
    const fingerprint = JSON.stringify([bare, dots, difference, view.layer, day.ends, theme, [...view.show], day.flags.length > 0]);
    if (fingerprint === this.#shown) return;
    this.#shown = fingerprint;
    const focused = this.#element.contains(document.activeElement) ? document.activeElement.name : "";
    const { title, unit } = LAYER_WORDS[view.layer];
    const colours = make("section", {}, make("h3", { text: `${title}${unit ? `, ${unit}` : ""}${difference ? `: ${WORDS.oneLessOther}` : ""}` }));
    const states = make("ul", { class: "key" });
    if (view.layer === "state") {
      for (const state of ["holds", "strained", "broken", "unseen"]) states.append(stateRow(state));
    } else {
      colours.append(rampBar(legendFigure(view.layer, (difference ? differenceEnds(day.ends) : day.ends)[view.layer], theme, difference)));
      states.append(stateRow("unseen"));
      if (dots) states.append(make("li", {}, dotsSign(), make("small", { text: WORDS.dotsOver })));
      for (const state of bare) states.append(stateRow(state, WORDS.bareWarning));
    }
    colours.append(states);
    const narrow = window.matchMedia("(max-width: 599px)").matches;
    const foldable = (name, text, wanted = true) => {
      const details = make("details", { open: this.#folds[name] ?? (wanted && !narrow) }, make("summary", { text }));
      details.addEventListener("toggle", () => {
        this.#folds[name] = details.open;
      });
      return details;
    };
    const signs = foldable("signs", WORDS.flags, day.flags.length > 0);
    const list = make("ul", { class: "key" });
    for (const [kind, words] of Object.entries(KIND_WORDS)) {
      list.append(make("li", {}, sign(kind), make("span", { text: kind === "front" ? `${words.name}; ${WORDS.lengthUnknown}` : words.name })));
    }
    signs.append(list);
    const show = foldable("show", WORDS.show);
    const choices = make("ul", { class: "key" });
    const rows = [
      ["receivers", view.show.has("rays") ? WORDS.receiversHeard : WORDS.receivers, receiverSign()],
      ["sites", WORDS.sites, siteSign()],
      ["rays", WORDS.rays, raySign()],
      ["veil", WORDS.veil, veilSign()],
    ];
    for (const [name, words, drawn] of rows) {
      choices.append(
        make("li", { class: "toggle" }, drawn, make("label", {}, make("input", { type: "checkbox", name, checked: view.show.has(name) }), make("span", { text: words }))),
      );
    }
    show.append(choices);
    this.#element.replaceChildren(colours, signs, show);
    if (focused) this.#element.querySelector(`input[name="${focused}"]`)?.focus();
  }

  close() {
    this.#element.removeEventListener("change", this.#toggle);
  }

  #toggle = (event) => {
    const show = new Set(this.#state.view.show);
    if (event.target.checked) show.add(event.target.name);
    else show.delete(event.target.name);
    this.#state.change({ show });
  };
}

function stateRow(state, means = STATE_WORDS[state].means) {
  const words = STATE_WORDS[state];
  return make("li", {}, swatch(state), make("span", {}, `${words.name} `, make("small", { text: means })));
}

function rampBar({ colours, marks }) {
  const bar = make("div", { class: "ramp-bar" });
  bar.style.setProperty("--ramp", colours.join(", "));
  const numbers = make("div", { class: "ramp-marks" });
  for (const mark of marks) {
    const text = make("span", { text: mark.text });
    text.style.setProperty("--part", `${mark.part * 100}%`);
    numbers.append(text);
  }
  return make("div", { class: "ramp" }, bar, numbers);
}

const drawnSign = (...parts) => draft("svg", { viewBox: "0 0 34 18", width: 34, height: 18, "aria-hidden": "true" }, ...parts);

/** @param {string} kind */
export function sign(kind) {
  return drawnSign(...(SIGN_PATHS[kind] ?? []).map(([name, d]) => draft("path", { class: name, d })));
}

const dotsSign = () => drawnSign(draft("rect", { class: "dots-ground", x: 0.5, y: 0.5, width: 33, height: 17 }), ...Array.from({ length: 10 }, (_, i) => draft("circle", { class: i % 2 ? "dot-paper" : "dot-ink", cx: 4 + 6.5 * (i % 5), cy: i < 5 ? 6 : 12, r: 1 })));
const receiverSign = () => drawnSign(draft("circle", { class: "sign-thin", cx: 17, cy: 9, r: 5 }), draft("circle", { cx: 17, cy: 9, r: 2.2, fill: "currentColor" }));
const siteSign = () => drawnSign(draft("path", { class: "sign-thin", d: "M13 1h8l4 4v8l-4 4h-8l-4-4v-8z" }));
const raySign = () => drawnSign(...[[8, 1.5], [16, 2.5], [26, 3.6]].map(([cx, r]) => draft("circle", { cx, cy: 9, r, fill: "currentColor" })));
const veilSign = () =>
  drawnSign(...[0.9, 0.6, 0.35, 0.12].map((opacity, i) => draft("rect", { x: 1 + i * 8, y: 3, width: 8, height: 12, fill: "currentColor", opacity })));
