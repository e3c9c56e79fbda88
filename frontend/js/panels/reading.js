/**
 * The reading of the chosen place: the sentence first, the numbers second, the evidence under "why".
 */

import { asSentence, bothClocks, compass, evidenceText, flagSentence, holdsSentence, KIND_WORDS, latText, LAYER_WORDS, limitsSentence, lonText, PAGE_WORDS, placeText, READING_WORDS, spanText, STATE_WORDS, withSigma, WORDS } from "../words.js";
import { away, placeAt } from "../figures/signs.js";
import { make, stateWord, trouble, viewOf } from "./parts.js";

const RANK = { holds: 0, unseen: 1, strained: 2, broken: 3 };

/** Flags up to this distance are told with a place, as the service does. */
const REACH_KM = 300;

/**
 * The reading at a time from the day's numbers already here; null where they are of another place or time.
 * @param {import("../main.js").Scene} scene
 * @returns {import("../api.js").Reading|null}
 */
export function readingOf({ series, view, time, day }) {
  if (!series || !view.place || series.place[0] !== view.place[0] || series.place[1] !== view.place[1]) return null;
  const i = series.times.indexOf(time);
  if (i < 0) return null;
  const [lat, lon] = view.place;
  const flags = day.flags
    .filter((flag) => flag.start <= time && time <= flag.end)
    .map((flag) => ({ ...flag, distanceKm: Math.hypot(...away(lat, lon, ...placeAt(flag, time))) }))
    .filter((flag) => flag.distanceKm <= REACH_KM)
    .sort((a, b) => a.distanceKm - b.distanceKm);
  return {
    lat, lon, time, state: series.state[i], sentence: series.sentence[i], delay: series.delay[i], delaySigma: series.sigma[i],
    slope: series.slope[i], slopeSigma: series.slopeSigma[i], slopeHeading: series.slopeHeading[i], support: series.support[i], flags,
  };
}

export class ReadingPanel {
  #elements;
  #state;
  #day = null;
  #open = false;

  /**
   * @param {{answer: HTMLElement, form: HTMLFormElement, site: HTMLSelectElement, lat: HTMLInputElement, lon: HTMLInputElement, error: HTMLElement}} elements
   * @param {import("../state.js").State} state
   */
  constructor(elements, state) {
    this.#elements = elements;
    this.#state = state;
    elements.form.addEventListener("submit", this.#submit);
    elements.site.addEventListener("change", this.#site);
  }

  /** The controls that choose a place. @param {import("../main.js").Scene} scene */
  show({ day, view }) {
    const { site, lat, lon, answer, error } = this.#elements;
    if (day !== this.#day) {
      this.#day = day;
      site.replaceChildren(
        make("option", { value: "", text: PAGE_WORDS.chosenOnTheMap }),
        ...day.sites.map((s, number) => make("option", { value: number, text: `${s.name} (${s.kind})` })),
      );
    }
    const here = view.place;
    const number = here ? day.sites.findIndex((s) => Math.abs(s.lat - here[0]) < 5e-4 && Math.abs(s.lon - here[1]) < 5e-4) : -1;
    site.value = number < 0 ? "" : String(number);
    if (here && document.activeElement !== lat) lat.value = latText(here[0]);
    if (here && document.activeElement !== lon) lon.value = lonText(here[1]);
    error.textContent = "";
    if (!here) answer.replaceChildren(make("p", { class: "empty", text: WORDS.choosePlace }));
  }

  /** A new answer is on its way. */
  wait() {
    const { answer } = this.#elements;
    answer.setAttribute("aria-busy", "true");
    if (!answer.querySelector(".lead")) answer.replaceChildren(make("p", { class: "empty", text: WORDS.loadingReading }));
  }

  /**
   * @param {import("../api.js").Reading} reading
   * @param {import("../main.js").Scene} scene
   */
  answer(reading, { day, view, siteStates }) {
    const { answer } = this.#elements;
    const zone = day.region.timezone;
    const site = day.sites.find((s) => Math.abs(s.lat - reading.lat) < 5e-4 && Math.abs(s.lon - reading.lon) < 5e-4);
    const where = site ? `${site.name}, ${placeText(reading.lat, reading.lon)}` : placeText(reading.lat, reading.lon);
    const number = site ? day.sites.indexOf(site) : -1;
    const reason = number >= 0 ? siteStates?.reasonOf(number, reading.time) ?? "" : "";
    // A site is judged by all that was seen near it, the map's cell by its own number: the worse of the two speaks first.
    const judged = number >= 0 ? siteStates?.stateOf(number, reading.time) ?? reading.state : reading.state;
    const worse = RANK[judged] > RANK[reading.state];
    const lead = worse ? [WORDS.siteIs(STATE_WORDS[judged].name), asSentence(reason), WORDS.mapAlone(reading.sentence)].filter(Boolean) : [reading.sentence];
    const state = worse ? judged : reading.state;
    const why = this.#why({ ...reading, state }, worse ? "" : reason, day, view);
    answer.replaceChildren(
      make("p", { class: "answer-where" }, where, make("br"), bothClocks(reading.time, zone, view.clock)),
      make("p", { class: `lead ${state}`, text: lead[0] }),
      ...lead.slice(1).map((text) => make("p", { class: "reason", text })),
      numbers({ ...reading, state }),
      make("p", { class: "fine", text: WORDS.sigma }),
      ...(state === "holds" ? [make("p", { class: "fine", text: holdsSentence(day.region.thresholds) })] : []),
      why,
    );
    answer.setAttribute("aria-busy", "false");
    answer.dataset.time = String(reading.time);
  }

  /** @param {Error} error @param {() => void} again */
  fail(error, again) {
    this.#elements.answer.replaceChildren(trouble(error, again));
    this.#elements.answer.setAttribute("aria-busy", "false");
  }

  close() {
    this.#elements.form.removeEventListener("submit", this.#submit);
    this.#elements.site.removeEventListener("change", this.#site);
  }

  #why(reading, reason, day, view) {
    const list = make("ul");
    // The reason of a site often repeats a flag that follows with all its evidence.
    const repeated = reading.flags.some((flag) => flag.evidence.slice(0, 40) === reason.slice(0, 40));
    if (reason && !repeated) list.append(make("li", {}, make("p", { text: asSentence(reason) })));
    for (const flag of reading.flags) {
      const how = { clock: view.clock, zone: day.region.timezone };
      const distance = Number.isFinite(flag.distanceKm) ? READING_WORDS.away(Math.round(flag.distanceKm)) : "";
      list.append(
        make("li", {},
          make("p", {}, make("strong", { text: flagSentence(flag) }), `${distance}, ${spanText(flag.start, flag.end, how)}.`),
          make("p", { text: evidenceText(flag) }),
          make("button", { type: "button", class: "linklike", text: READING_WORDS.goTo(KIND_WORDS[flag.kind]?.short), click: () => this.#state.change(viewOf(tracked(flag, day), day)) }),
        ),
      );
    }
    if (!list.children.length) list.append(make("li", {}, make("p", { text: WORDS.noFlagsNear })));
    list.append(make("li", {}, make("p", { text: limitsSentence(day.region.thresholds) })));
    const details = make("details", { class: "why", open: this.#open || reading.state === "broken" || reading.state === "strained" }, make("summary", { text: READING_WORDS.why }), list);
    details.addEventListener("toggle", () => {
      this.#open = details.open;
    });
    return details;
  }

  #site = () => {
    const number = this.#elements.site.value;
    const site = number === "" ? null : this.#day?.sites[Number(number)];
    if (site) this.#state.change({ place: [site.lat, site.lon] });
  };

  #submit = (event) => {
    event.preventDefault();
    const { lat, lon, error } = this.#elements;
    const place = [degrees(lat.value, "S"), degrees(lon.value, "W")];
    const region = this.#day?.region;
    if (!region || !Number.isFinite(place[0]) || !Number.isFinite(place[1])) {
      error.textContent = READING_WORDS.degrees;
      (Number.isFinite(place[0]) ? lon : lat).focus();
      return;
    }
    if (place[0] < region.south || place[0] > region.north || place[1] < region.west || place[1] > region.east) {
      error.textContent = READING_WORDS.outside(latText(region.south, 1), latText(region.north, 1), lonText(region.west, 1), lonText(region.east, 1));
      return;
    }
    this.#state.change({ place: /** @type {[number, number]} */ (place) });
  };
}

/** A reading tells a flag without its track; the day's own list has it. */
function tracked(flag, day) {
  return day.flags.find((one) => one.kind === flag.kind && one.start === flag.start && one.lat === flag.lat && one.lon === flag.lon) ?? flag;
}

/**
 * Degrees as people write them: "40.25 S", "40.25° S", "-40.25", "−40.25".
 * @param {string} text
 * @param {"S"|"W"} negative  the letter that turns the sign
 */
export function degrees(text, negative) {
  const found = /^\s*([-−+]?)\s*(\d+(?:[.,]\d+)?)\s*°?\s*([NSEWnsew]?)\s*$/.exec(text);
  if (!found) return NaN;
  const letter = found[3].toUpperCase();
  if (letter && !(negative === "S" ? "NS" : "EW").includes(letter)) return NaN;
  const value = Number(found[2].replace(",", "."));
  const minus = (found[1] === "-" || found[1] === "−") !== (letter === negative);
  return minus ? -value : value;
}

/** @param {import("../api.js").Reading} reading */
function numbers(reading) {
  const row = (name, value, small) =>
    make("div", {}, make("dt", { text: name }), make("dd", {}, make("strong", { text: value }), ...(small ? [make("small", { text: small })] : [])));
  const state = make("div", {}, make("dt", { text: READING_WORDS.corrections }), make("dd", {}, stateWord(reading.state)));
  // 40.308193 TECU m² s⁻² over the square of 1575.42 MHz: 0.1624 m of delay for each TECU.
  const perTecu = 0.1624;
  const content = Number.isFinite(reading.delay) ? READING_WORDS.content(withSigma(reading.delay / perTecu, reading.delaySigma / perTecu, "TECU", 1)) : "";
  const toward = Number.isFinite(reading.slopeHeading) && reading.slope > 0 ? READING_WORDS.toward(compass(reading.slopeHeading)) : "";
  return make(
    "dl",
    { class: "numbers" },
    row(WORDS.verticalDelay, withSigma(reading.delay, reading.delaySigma, "m"), content),
    row(LAYER_WORDS.slope.name, withSigma(reading.slope, reading.slopeSigma, "mm/km", 1), toward),
    state,
    row(READING_WORDS.carriedBy, Number.isFinite(reading.support) ? READING_WORDS.lines(reading.support) : READING_WORDS.notKnown),
  );
}
