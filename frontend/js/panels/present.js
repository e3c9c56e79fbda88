/**
 * Now: how old the newest data are, what fails, and what is predicted to arrive. Follows the newest day.
 */

import * as api from "../api.js";
import { agoText, compass, dateText, fixed, flagSentence, KIND_WORDS, timeText, WORDS } from "../words.js";
import { make, stateWord, trouble, viewOf } from "./parts.js";

/** So many alerts are shown; the rest is counted. */
const MOST_ALERTS = 8;

/** Data older than this are not the present. */
export const STALE_AFTER = 20 * 60000;

export class PresentPanel {
  #elements;
  #state;
  #scene = null;
  #timer = 0;
  #shown = "";
  /** @type {Map<number, import("../api.js").Notice>|null} */ #notices = null;
  #asked = false;
  /** @type {AbortController|null} */ #coming = null;
  #live;

  /**
   * @param {{age: HTMLElement, back: HTMLButtonElement, fails: HTMLElement, flags: HTMLElement, next: HTMLElement, note: HTMLElement, alerts: HTMLElement}} elements
   * @param {import("../state.js").State} state @param {import("../live.js").Live} live
   */
  constructor(elements, state, live) {
    this.#live = live;
    live.addEventListener("notice", this.#heard);
    this.#elements = elements;
    this.#state = state;
    elements.back.addEventListener("click", () => state.change({ minute: null }));
    this.#timer = window.setInterval(() => this.#scene && this.show(this.#scene), 10000);
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    this.#scene = scene;
    if (scene.view.ask !== "now") return;
    this.#age();
    if (!this.#asked) this.#ask();
    const { day, time, view, siteStates } = scene;
    const key = JSON.stringify([day.region.key, day.day, time, view.clock, siteStates?.serial, this.#stale()]);
    if (key === this.#shown) return;
    this.#shown = key;
    const how = { clock: view.clock, zone: day.region.timezone };
    const { fails, flags } = this.#elements;
    const bad = day.sites
      .map((site, number) => ({ site, state: siteStates?.stateOf(number, time) ?? "unseen" }))
      .filter(({ state }) => state !== "holds");
    fill(fails, bad.map(({ site, state }) => make("li", {}, stateWord(state), " ", make("button", { type: "button", class: "linklike", text: site.name, click: () => this.#state.change({ place: [site.lat, site.lon] }) }))), day.sites.length ? (this.#stale() ? WORDS.allHeld : WORDS.allHold) : WORDS.noSites);
    const active = day.flags.filter((flag) => flag.start <= time && time <= flag.end);
    fill(flags, active.map((flag) => make("li", {}, make("button", { type: "button", class: "linklike", text: KIND_WORDS[flag.kind]?.name ?? flag.kind, click: () => this.#state.change({ place: viewOf(flag, day).place }) }), ` ${flagSentence(flag).split(", ").slice(1).join(", ") || flag.evidence.split(/[:;]/)[0]}`)), WORDS.noFlagsNow);
    this.#foretell();
  }

  /** What comes is reckoned by the service alone, as for its alerts; nothing is asked before a front was seen. */
  async #foretell() {
    const { day, time, view } = this.#scene;
    const { next, note } = this.#elements;
    this.#coming?.abort();
    note.hidden = true;
    if (!day.flags.some((flag) => flag.kind === "front" && flag.start <= time)) {
      fill(next, [], WORDS.noFront);
      return;
    }
    const asked = new AbortController();
    this.#coming = asked;
    fill(next, [], WORDS.loadingArrivals);
    try {
      const { coming, hours } = await api.coming(day.region.key, day.day, time, { signal: asked.signal });
      const how = { clock: view.clock, zone: day.region.timezone };
      fill(
        next,
        coming.map((one) => make("li", {}, make("strong", { text: timeText(one.time, how) }), ` ${one.site}, ${WORDS.inMinutes(one.minutes, one.giveOrTake)}`)),
        WORDS.noArrivals(hours),
      );
      const fronts = [...new Set(coming.map((one) => WORDS.frontFrom(compass(one.heading + 180), fixed(one.speed, 0))))];
      note.hidden = !coming.length;
      note.textContent = WORDS.ifItKeeps(fronts.join(", "));
    } catch (error) {
      if (error.name !== "AbortError" && this.#coming === asked) next.replaceChildren(make("li", {}, trouble(error, () => this.#foretell())));
    }
  }

  close() {
    clearInterval(this.#timer);
    this.#coming?.abort();
    this.#live.removeEventListener("notice", this.#heard);
  }

  async #ask() {
    this.#asked = true;
    const { alerts } = this.#elements;
    alerts.replaceChildren(make("li", { class: "empty", text: WORDS.loadingAlerts }));
    try {
      const found = await api.notices();
      this.#notices = new Map([...found, ...(this.#notices?.values() ?? [])].map((one) => [one.id, one]));
      this.#alert();
    } catch (error) {
      this.#asked = false;
      alerts.replaceChildren(make("li", {}, trouble(error, () => this.#ask())));
    }
  }

  #heard = (event) => {
    const notice = /** @type {CustomEvent} */ (event).detail;
    const known = this.#notices?.get(notice.id);
    if (!this.#notices || JSON.stringify(known) === JSON.stringify(notice)) return;
    this.#notices.set(notice.id, notice);
    this.#alert();
  };

  /** Newest first; what came in the meantime is read aloud. */
  #alert() {
    const { alerts } = this.#elements;
    const found = [...(this.#notices?.values() ?? [])].sort((a, b) => b.made - a.made || b.id - a.id);
    const zone = this.#scene.day.region.timezone;
    const how = { clock: this.#scene.view.clock, zone };
    const item = (one) => make("li", {}, make("strong", { text: `${dateText(one.made, how.clock === "local" ? zone : "UTC")}, ${timeText(one.made, how)}` }), ` ${one.sentence}`, ...(one.facts.simulated ? [make("small", { text: ` ${WORDS.simulatedShort}` })] : []));
    fill(alerts, found.slice(0, MOST_ALERTS).map(item), WORDS.noAlerts);
    if (found.length > MOST_ALERTS) alerts.append(make("li", { class: "fine", text: WORDS.olderAlerts(found.length - MOST_ALERTS) }));
  }

  /** Is what is shown older, or later, than the present? */
  #stale() {
    const old = Date.now() - this.#scene.time;
    return old < 0 || old > STALE_AFTER;
  }

  #age() {
    if (!this.#scene || this.#scene.view.ask !== "now") return;
    const { day, time, view } = this.#scene;
    const { age, back } = this.#elements;
    const newest = day.times[day.times.length - 1];
    const old = Date.now() - newest;
    const at = `${timeText(newest, { clock: view.clock, zone: day.region.timezone })}, ${dateText(newest)}`;
    const words = old < 0 ? WORDS.aheadOfClock(at) : old > STALE_AFTER ? WORDS.stale(at, agoText(old)) : WORDS.fresh(at, agoText(old));
    const behind = newest - time;
    const text = behind > 60000 ? `${words} ${WORDS.lookingBack(Math.round(behind / 60000))}` : words;
    if (age.textContent !== text) age.textContent = text;
    age.classList.toggle("stale", old < 0 || old > STALE_AFTER);
    back.hidden = behind <= 60000;
  }
}

/** @param {HTMLElement} list @param {Node[]} items @param {string} none */
function fill(list, items, none) {
  list.replaceChildren(...(items.length ? items : [make("li", { class: "empty", text: none })]));
}
