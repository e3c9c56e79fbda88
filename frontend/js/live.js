/**
 * Follows along with the service while somebody looks: tasks, days and notices that change, as events of the same names.
 * Hangs up while the page is hidden or nobody listens, since a browser keeps few connections to one server. Never draws.
 */

import { news } from "./api.js";

export class Live extends EventTarget {
  /** @type {Set<string>} */ #wanted = new Set();
  /** @type {AbortController|null} */ #open = null;
  #wait = 1000;
  /** @type {any} */ #soon;

  constructor() {
    super();
    document.addEventListener("visibilitychange", () => this.#turn());
  }

  /** Somebody wants to hear, or no more. @param {string} who @param {boolean} wants */
  want(who, wants) {
    if (this.#wanted.has(who) === wants) return;
    if (wants) this.#wanted.add(who);
    else this.#wanted.delete(who);
    this.#turn();
  }

  #turn() {
    const needed = this.#wanted.size > 0 && !document.hidden;
    if (needed && !this.#open) this.#follow();
    if (!needed) {
      clearTimeout(this.#soon);
      this.#open?.abort();
      this.#open = null;
    }
  }

  async #follow() {
    const mine = new AbortController();
    this.#open = mine;
    try {
      await news((kind, what) => {
        this.#wait = 1000;
        this.dispatchEvent(new CustomEvent(kind, { detail: what }));
      }, mine.signal);
    } catch {
      // The server went away, or asks for a key: ask again later; what needs an answer asks by itself.
    }
    if (this.#open !== mine) return;
    this.#wait = Math.min(60000, 2 * this.#wait);
    this.#soon = setTimeout(() => {
      this.#open = null;
      this.#turn();
    }, this.#wait);
  }
}
