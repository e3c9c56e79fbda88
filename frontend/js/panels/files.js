/**
 * Your files: sent by drop or by choice, each with its progress or the reason why not; then the work that is made of
 * them, stage by stage, and the way to the finished day.
 */

import * as api from "../api.js";
import { bytesText, countText, FILE_WORDS, shareText, WORDS } from "../words.js";
import { make, trouble } from "./parts.js";

/** So many files are under way at once. */
const AT_ONCE = 3;

/** @typedef {{file: File, state: "waiting"|"sending"|"sent"|"refused", keptAs: string, item: HTMLElement, bar: HTMLProgressElement, word: HTMLElement, again: HTMLElement}} Row */

export class FilesPanel {
  #dialog;
  #state;
  #live;
  #scene = null;
  /** @type {Row[]} */ #rows = [];
  /** @type {Promise<Awaited<ReturnType<typeof api.openBatch>>>|null} */ #batch = null;
  /** @type {Map<number, {task: import("../api.js").Task, item: HTMLElement}>} */ #tasks = new Map();
  #asking = new AbortController();
  #running = 0;
  #built = false;
  /** @type {Record<string, any>} */ #parts = {};

  /**
   * @param {HTMLDialogElement} dialog @param {import("../state.js").State} state @param {import("../live.js").Live} live
   */
  constructor(dialog, state, live) {
    this.#dialog = dialog;
    this.#state = state;
    this.#live = live;
    dialog.addEventListener("close", this.#closed);
    live.addEventListener("work", this.#heard);
  }

  /** @param {import("../main.js").Scene|null} scene  null while there is no day @param {boolean} open @param {string[]} regions */
  show(scene, open, regions) {
    this.#scene = scene;
    if (open && !this.#built) this.#build();
    if (this.#built) this.#fillRegions(regions);
    this.#live.want("files", open);
    if (open && !this.#dialog.open) {
      this.#dialog.showModal();
      this.#queue();
    }
    if (!open && this.#dialog.open) this.#dialog.close();
  }

  close() {
    this.#asking.abort();
    this.#dialog.removeEventListener("close", this.#closed);
    this.#live.removeEventListener("work", this.#heard);
    this.#live.want("files", false);
  }

  /** Send these. @param {File[]} files */
  take(files) {
    if (!files.length) return;
    const { list, begin } = this.#parts;
    begin.disabled = true;
    this.#parts.left.replaceChildren();
    for (const file of files) {
      const bar = /** @type {HTMLProgressElement} */ (make("progress", { max: 1, value: 0, "aria-label": FILE_WORDS.progressOf(file.name) }));
      const word = make("span", { class: "file-word", text: FILE_WORDS.waiting });
      const again = make("button", { type: "button", class: "linklike", text: FILE_WORDS.sendAgain, hidden: true });
      const item = make("li", { "data-state": "waiting" }, make("strong", { text: file.name }), make("small", { text: bytesText(file.size) }), bar, word, again);
      /** @type {Row} */ const row = { file, state: "waiting", keptAs: "", item, bar, word, again };
      again.addEventListener("click", () => {
        this.#turn(row, "waiting", FILE_WORDS.waiting);
        this.#pump();
      });
      this.#rows.push(row);
      list.append(item);
    }
    this.#pump();
  }

  #build() {
    this.#built = true;
    const words = FILE_WORDS;
    const input = /** @type {HTMLInputElement} */ (make("input", { type: "file", multiple: true, id: "files-input" }));
    input.addEventListener("change", () => {
      this.take([...(input.files ?? [])]);
      input.value = "";
    });
    const said = make("p", { class: "files-said", id: "files-said", role: "status" });
    const list = make("ul", { class: "files-list", id: "files-list", "aria-label": words.title });
    const begin = /** @type {HTMLButtonElement} */ (make("button", { type: "button", id: "files-begin", text: words.begin, disabled: true, click: () => this.#begin() }));
    const region = /** @type {HTMLSelectElement} */ (make("select", { id: "files-region" }));
    const left = make("div", { id: "files-left" });
    const tasks = make("ul", { class: "files-list", id: "files-tasks", "aria-label": words.work });
    this.#parts = { said, list, begin, region, left, tasks };
    this.#dialog.replaceChildren(
      make("form", { method: "dialog", class: "dialog-head" }, make("h2", { id: "files-title", text: words.title }), make("button", { class: "plain", text: words.close })),
      make("p", { class: "fine", text: words.about }),
      make("div", { class: "drop-here" }, make("label", { for: "files-input", text: words.choose }), input, make("p", { class: "fine", text: words.orDrop })),
      list, said, left,
      make("p", { class: "job" }, make("label", {}, words.region, " ", region), begin),
      make("h3", { text: words.work }),
      tasks,
    );
    this.#tell();
  }

  #fillRegions(regions) {
    const { region } = this.#parts;
    const key = JSON.stringify(regions);
    if (region.dataset.key === key) return;
    region.dataset.key = key;
    region.replaceChildren(...regions.map((text) => make("option", { value: text, text })), make("option", { value: "", text: FILE_WORDS.drawn }));
    const here = this.#scene?.view.region ?? "";
    region.value = regions.includes(here) ? here : "";
  }

  #closed = () => {
    if (this.#state.view.files) this.#state.change({ files: false });
  };

  /** @param {Row} row @param {Row["state"]} state @param {string} words @param {boolean} [anew]  may sending it again help */
  #turn(row, state, words, anew = false) {
    row.state = row.item.dataset.state = state;
    row.word.textContent = words;
    row.bar.hidden = state === "sent" || state === "refused"; // a full bar takes the room of what the file is
    row.again.hidden = state !== "refused" || !anew;
    this.#tell();
  }

  #tell() {
    const count = (state) => this.#rows.filter((row) => row.state === state).length;
    const [sent, refused] = [count("sent"), count("refused")];
    const words = this.#rows.length ? FILE_WORDS.soFar(sent, refused, this.#rows.length) : "";
    if (this.#parts.said.textContent !== words) this.#parts.said.textContent = words;
    this.#parts.begin.disabled = !sent || this.#running > 0 || count("waiting") > 0;
  }

  async #pump() {
    while (this.#running < AT_ONCE) {
      const row = this.#rows.find((one) => one.state === "waiting");
      if (!row) break;
      this.#running += 1;
      this.#turn(row, "sending", FILE_WORDS.sending("0 %"));
      this.#send(row).finally(() => {
        this.#running -= 1;
        this.#tell();
        this.#pump();
      });
    }
  }

  async #send(row) {
    try {
      this.#batch ??= api.openBatch({ signal: this.#asking.signal });
      const { batch, fileBytes } = await this.#batch;
      // Said here, since the server would hang up in the middle.
      if (row.file.size > fileBytes) throw new Error(FILE_WORDS.tooLarge(bytesText(fileBytes)));
      if (!row.file.size) throw new Error(FILE_WORDS.empty);
      const { keptAs, ...told } = await api.sendFile(batch, row.file, {
        signal: this.#asking.signal,
        progress: (share) => {
          row.bar.value = share;
          row.word.textContent = share < 1 ? FILE_WORDS.sending(shareText(share)) : FILE_WORDS.looking;
        },
      });
      row.keptAs = keptAs;
      this.#turn(row, "sent", FILE_WORDS.holds(told));
    } catch (error) {
      if (error?.name === "AbortError") return;
      if (error.status === 401) this.#key(error, () => this.#retry());
      if (error.status === 404) this.#batch = null; // the batch was cleared away
      // What the server read and did not like will not please it the second time.
      this.#turn(row, "refused", error.message, error instanceof api.ServiceError && (error.status < 400 || error.status > 422 || [401, 404].includes(error.status)));
      // A batch that could not be opened is asked for anew.
      await this.#batch?.catch(() => (this.#batch = null));
    }
  }

  /** What was refused for want of a key is sent again. */
  #retry() {
    this.#parts.left.replaceChildren();
    this.#batch = null;
    for (const row of this.#rows) if (row.state === "refused") this.#turn(row, "waiting", FILE_WORDS.waiting);
    this.#pump();
  }

  #key(error, again) {
    if (!this.#parts.left.querySelector(".key-form")) this.#parts.left.replaceChildren(trouble(error, again));
  }

  async #begin() {
    const { begin, left, region } = this.#parts;
    begin.disabled = true;
    try {
      const { batch } = await this.#batch;
      const { tasks, leftOut } = await api.beginWork(batch, region.value, { signal: this.#asking.signal });
      this.#batch = null; // the next files are another batch
      const nameOf = (keptAs) => this.#rows.find((row) => row.keptAs === keptAs)?.file.name ?? keptAs;
      left.replaceChildren(...(leftOut.length ? [make("h3", { text: FILE_WORDS.leftOut }), make("ul", {}, ...leftOut.map((one) => make("li", { text: FILE_WORDS.because(nameOf(one.file), one.line, one.reason) })))] : []));
      this.#rows = [];
      this.#parts.list.replaceChildren();
      this.#parts.said.textContent = FILE_WORDS.queued(countText(tasks.length, "day"));
      for (const task of tasks) this.#draw(task);
    } catch (error) {
      if (error?.name === "AbortError") return;
      left.replaceChildren(trouble(error, () => this.#begin()));
      this.#tell();
    }
  }

  async #queue() {
    try {
      for (const task of (await api.work({ signal: this.#asking.signal })).reverse()) this.#draw(task);
      if (!this.#tasks.size) this.#parts.tasks.replaceChildren(make("li", { class: "empty", text: FILE_WORDS.noWork }));
    } catch (error) {
      if (error?.name === "AbortError") return;
      this.#parts.left.replaceChildren(trouble(error, () => {
        this.#parts.left.replaceChildren();
        this.#queue();
      }));
    }
  }

  #heard = (event) => this.#built && this.#draw(/** @type {CustomEvent} */ (event).detail);

  /** A task as it now is; the newest stands first. @param {import("../api.js").Task} task */
  #draw(task) {
    const { tasks } = this.#parts;
    tasks.querySelector(".empty")?.remove();
    const known = this.#tasks.get(task.id);
    if (known && known.task.changed > task.changed) return;
    const item = known?.item ?? make("li", { "data-task": task.id });
    if (!known) tasks.prepend(item);
    this.#tasks.set(task.id, { task, item });
    if (known && JSON.stringify(known.task) === JSON.stringify(task)) return;
    const focused = item.contains(document.activeElement);
    item.dataset.state = task.state;
    const change = (what, text) => make("button", { type: "button", class: "linklike", text, click: () => this.#change(task, what) });
    const busy = task.state === "running";
    const words = {
      waiting: task.nextTry > 0 ? FILE_WORDS.nextTry((task.nextTry - Date.now()) / 1000) : FILE_WORDS.inQueue,
      running: FILE_WORDS.stage(task.stage, task.word), done: FILE_WORDS.done, failed: task.said || FILE_WORDS.failed, cancelled: FILE_WORDS.cancelled,
    }[task.state];
    item.replaceChildren(
      make("strong", { text: task.title }),
      ...(busy ? [make("progress", { max: 1, value: task.share, "aria-label": FILE_WORDS.progressOf(task.stage) })] : []),
      make("span", { class: "file-word", role: "status", text: words }),
      ...(task.state === "done" && task.resultRegion ? [make("button", { type: "button", text: FILE_WORDS.open(task.day), click: () => this.#go(task) })] : []),
      ...(busy || task.state === "waiting" ? [change("cancel", FILE_WORDS.cancel)] : task.state === "done" ? [] : [change("again", WORDS.tryAgain)]),
    );
    if (focused) item.querySelector("button")?.focus();
  }

  async #change(task, what) {
    try {
      this.#draw(await api.changeTask(task.id, what));
    } catch (error) {
      this.#parts.left.replaceChildren(trouble(error, () => this.#change(task, what)));
    }
  }

  #go(task) {
    const other = task.resultRegion !== this.#state.view.region;
    this.#state.change({ files: false, ask: "past", region: task.resultRegion, day: task.day, minute: null, ...(other ? { place: null } : {}) });
  }
}

/**
 * All files of a drop, those in folders too.
 * @param {{entry: any, file: File|null}[]} carried @returns {Promise<File[]>}
 */
export async function filesOf(carried) {
  /** @param {any} entry @returns {Promise<File[]>} */
  const under = async (entry) => {
    if (entry.isFile) return [await new Promise((resolve, reject) => entry.file(resolve, reject))];
    const reader = entry.createReader();
    /** @type {File[]} */ const out = [];
    for (;;) {
      const some = await new Promise((resolve, reject) => reader.readEntries(resolve, reject));
      if (!some.length) return out;
      for (const one of some) out.push(...(await under(one)));
    }
  };
  const all = await Promise.all(carried.map(({ entry, file }) => (entry?.isDirectory ? under(entry) : file ? [file] : [])));
  return all.flat();
}
