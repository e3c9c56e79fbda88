/**
 * Plays the day: steps through its epochs at a chosen rate, waiting where an hour of maps is still on its way.
 */

import { nearest } from "../figures/strip.js";
import { WORDS } from "../words.js";

export class PlayerPanel {
  #button;
  #rate;
  #state;
  #ready;
  #scene = null;
  #frame = 0;
  #due = 0;
  #count = 0;

  /** @param {{button: HTMLButtonElement, rate: HTMLSelectElement}} elements @param {import("../state.js").State} state @param {() => boolean} ready  is the map of now drawn */
  constructor({ button, rate }, state, ready) {
    this.#button = button;
    this.#rate = rate;
    this.#state = state;
    this.#ready = ready;
    button.addEventListener("click", () => (this.#frame ? this.#stop() : this.#start()));
  }

  /** @param {import("../main.js").Scene} scene */
  show(scene) {
    if (this.#scene && this.#scene.day !== scene.day) this.#stop();
    this.#scene = scene;
    this.#button.disabled = scene.day.times.length < 2;
  }

  close() {
    this.#stop();
  }

  #start() {
    if (!this.#scene) return;
    const { day, time } = this.#scene;
    if (nearest(day.times, time) >= day.times.length - 1) this.#go(0);
    this.#due = performance.now();
    this.#count = 0;
    this.#frame = requestAnimationFrame(this.#step);
    this.#tell();
  }

  #stop() {
    cancelAnimationFrame(this.#frame);
    this.#frame = 0;
    this.#tell();
  }

  #tell() {
    const playing = this.#frame !== 0;
    this.#button.textContent = playing ? WORDS.pause : WORDS.play;
    this.#button.dataset.playing = String(playing);
    this.#button.dataset.count = String(this.#count);
  }

  #go(index) {
    const { day } = this.#scene;
    this.#state.change({ minute: Math.round((day.times[index] - day.start) / 60000) });
  }

  #step = (now) => {
    if (!this.#frame) return;
    this.#frame = requestAnimationFrame(this.#step);
    const every = 1000 / Number(this.#rate.value);
    // A frame comes a little before or after the beat: half a frame is near enough.
    if (now < this.#due - 8) return;
    if (!this.#ready()) {
      this.#due = now;
      return;
    }
    const { day, time } = this.#scene;
    const index = nearest(day.times, time);
    if (index >= day.times.length - 1) {
      this.#stop();
      return;
    }
    this.#due = Math.max(this.#due + every, now);
    this.#count += 1;
    this.#button.dataset.count = String(this.#count);
    this.#go(index + 1);
  };
}
