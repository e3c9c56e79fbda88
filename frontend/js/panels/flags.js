/**
 * The table of the day's flags: a row leads to its time and place.
 */

import { compass, evidenceText, fixed, HEADS, KIND_WORDS, placeText, spanText, withSigma, WORDS } from "../words.js";
import { sign } from "./legend.js";
import { make, stateWord, viewOf } from "./parts.js";

export class FlagsPanel {
  #element;
  #state;
  #drawn = "";

  /** @param {HTMLElement} element @param {import("../state.js").State} state */
  constructor(element, state) {
    this.#element = element;
    this.#state = state;
  }

  /** @param {import("../main.js").Scene} scene */
  show({ day, view, time }) {
    const key = JSON.stringify([day.region.key, day.day, view.clock, day.flags.length]);
    if (key !== this.#drawn) {
      this.#drawn = key;
      this.#draw(day, view);
    }
    for (const row of this.#element.querySelectorAll("tr[data-start]")) {
      const on = Number(row.dataset.start) <= time && time <= Number(row.dataset.end);
      if (on) row.setAttribute("aria-current", "true");
      else row.removeAttribute("aria-current");
    }
  }

  close() {
    this.#element.replaceChildren();
  }

  #draw(day, view) {
    if (!day.flags.length) {
      this.#element.replaceChildren(make("p", { class: "empty", text: WORDS.noFlags }));
      return;
    }
    const how = { clock: view.clock, zone: day.region.timezone };
    const heads = HEADS.flags;
    const body = make("tbody");
    for (const flag of day.flags) {
      body.append(
        make("tr", { "data-start": flag.start, "data-end": flag.end, "data-kind": flag.kind },
          make("td", { class: "nowrap" }, make("button", { type: "button", class: "linklike", text: spanText(flag.start, flag.end, how), click: () => this.#go(flag, day) })),
          make("td", { class: "nowrap" }, make("span", { class: "state-word" }, sign(flag.kind), KIND_WORDS[flag.kind]?.name ?? flag.kind)),
          make("td", { class: "nowrap" }, flag.state ? stateWord(flag.state) : ""),
          make("td", { class: "number", "data-head": heads[3], "data-none": !Number.isFinite(flag.slope), text: Number.isFinite(flag.slope) ? withSigma(flag.slope, flag.sigma, "mm/km") : "–" }),
          make("td", { class: "nowrap", "data-head": heads[4], "data-none": !Number.isFinite(flag.speed), text: Number.isFinite(flag.speed) ? WORDS.movesTo(fixed(flag.speed, 0), compass(flag.heading)) : "–" }),
          make("td", { class: "nowrap", "data-head": heads[5], text: placeText(flag.lat, flag.lon, 1) }),
          make("td", {}, evidenceText(flag)),
        ),
      );
    }
    this.#element.replaceChildren(
      make("table", {},
        make("thead", {}, make("tr", {}, ...heads.map((text, i) => make("th", { scope: "col", text, class: i === 3 ? "number" : undefined })))),
        body,
      ),
    );
  }

  #go(flag, day) {
    this.#state.change(viewOf(flag, day));
    document.getElementById("map")?.scrollIntoView({ block: "nearest" });
  }
}
