/**
 * What the user is looking at, kept in the URL: a link is a view, and the back button goes to the view before.
 * Never fetches, never draws. Listeners hear "change" with the names of what changed.
 */

/** @typedef {"delay"|"uncertainty"|"slope"|"state"} Layer */
/** @typedef {"past"|"now"|"ahead"|"network"} Ask */
/**
 * @typedef {object} View
 * @property {string} region   key of the region, "" until known
 * @property {string} day      YYYY-MM-DD, "" until known
 * @property {number|null} minute  minutes since 00:00 UTC of that day; null = choose for me
 * @property {Layer} layer
 * @property {[number, number]|null} place  latitude, longitude [deg]
 * @property {Set<string>} show  of SHOWABLE
 * @property {"utc"|"local"} clock
 * @property {Ask} ask        which question the page answers
 * @property {string} versus  the day to compare with: "" none, "quiet" the quiet days around, or YYYY-MM-DD
 * @property {boolean} beside two maps side by side, or their difference
 * @property {string} who     the site whose days the year shows, "" the region
 * @property {string} span    of the year: "", a year, or a season
 * @property {string} worst   days of the year that are at least so bad
 * @property {string} field   days of the year by the magnetic field: "", "quiet", "disturbed", "storm"
 * @property {string} use     what the outlook is for, "" the first of the region
 * @property {boolean} files  is the sending of files open
 */

/** @type {Layer[]} */
export const LAYERS = ["delay", "uncertainty", "slope", "state"];
/** @type {Ask[]} */
export const ASKS = ["past", "now", "ahead", "network"];
/** How the magnetic field was, by the highest Kp of the day. */
export const FIELD = ["quiet", "disturbed", "storm"];
export const SHOWABLE = ["receivers", "rays", "sites", "veil"];
const SHOWN_AT_FIRST = ["receivers", "sites", "veil"];

/** @returns {View} */
export function firstView() {
  return {
    region: "",
    day: "",
    minute: null,
    layer: "delay",
    place: null,
    show: new Set(SHOWN_AT_FIRST),
    clock: "utc",
    ask: "past",
    versus: "",
    beside: true,
    who: "",
    span: "",
    worst: "",
    field: "",
    use: "",
    files: false,
  };
}

/** @param {number} minute */
export function clockText(minute) {
  const m = Math.round(minute);
  const sign = m < 0 ? "-" : "";
  const a = Math.abs(m);
  return `${sign}${String(Math.floor(a / 60)).padStart(2, "0")}:${String(a % 60).padStart(2, "0")}`;
}

/**
 * The query of a view; what is at its first value stays out.
 * @param {View} view
 */
export function toQuery(view) {
  const parts = [];
  if (view.ask !== "past") parts.push(["ask", view.ask]);
  if (view.region) parts.push(["region", view.region]);
  if (view.day) parts.push(["day", view.day]);
  if (view.minute !== null) parts.push(["time", clockText(view.minute)]);
  if (view.layer !== "delay") parts.push(["layer", view.layer]);
  if (view.place) parts.push(["at", view.place.map((v) => String(Number(v.toFixed(3)))).join(",")]);
  const show = SHOWABLE.filter((name) => view.show.has(name));
  if (show.join() !== SHOWABLE.filter((name) => SHOWN_AT_FIRST.includes(name)).join()) {
    parts.push(["show", show.join(",") || "none"]);
  }
  if (view.clock !== "utc") parts.push(["clock", view.clock]);
  if (view.versus) parts.push(["versus", view.versus]);
  if (!view.beside) parts.push(["as", "difference"]);
  for (const name of ["who", "span", "worst", "field", "use"]) if (view[name]) parts.push([name, view[name]]);
  if (view.files) parts.push(["files", "open"]);
  const text = parts.map(([key, value]) => `${key}=${encodeURIComponent(value).replace(/%2C/g, ",").replace(/%3A/g, ":")}`);
  return text.length ? `?${text.join("&")}` : "";
}

/**
 * The view of a query. What cannot be understood is left at its first value: a damaged link still opens.
 * @param {string} query
 * @returns {View}
 */
export function fromQuery(query) {
  const given = new URLSearchParams(query);
  const view = firstView();
  view.region = given.get("region") ?? "";
  const day = given.get("day") ?? "";
  if (/^\d{4}-\d{2}-\d{2}$/.test(day)) view.day = day;
  const time = /^(\d{1,2}):(\d{2})$/.exec(given.get("time") ?? "");
  if (time && Number(time[1]) < 24 && Number(time[2]) < 60) view.minute = Number(time[1]) * 60 + Number(time[2]);
  const layer = /** @type {Layer} */ (given.get("layer"));
  if (LAYERS.includes(layer)) view.layer = layer;
  const at = (given.get("at") ?? "").split(",").map(Number);
  if (given.get("at") && at.length === 2 && Math.abs(at[0]) <= 90 && Math.abs(at[1]) <= 360) view.place = [at[0], at[1]];
  if (given.has("show")) {
    const names = (given.get("show") ?? "").split(",");
    view.show = new Set(SHOWABLE.filter((name) => names.includes(name)));
  }
  if (given.get("clock") === "local") view.clock = "local";
  const ask = /** @type {Ask} */ (given.get("ask"));
  if (ASKS.includes(ask)) view.ask = ask;
  const versus = given.get("versus") ?? "";
  if (versus === "quiet" || /^\d{4}-\d{2}-\d{2}$/.test(versus)) view.versus = versus;
  view.beside = given.get("as") !== "difference";
  view.who = given.get("who") ?? "";
  if (/^(\d{4}|dec-feb|mar-may|jun-aug|sep-nov)$/.test(given.get("span") ?? "")) view.span = given.get("span") ?? "";
  if (["strained", "broken"].includes(given.get("worst") ?? "")) view.worst = given.get("worst") ?? "";
  if (FIELD.includes(given.get("field") ?? "")) view.field = given.get("field") ?? "";
  view.use = given.get("use") ?? "";
  view.files = given.get("files") === "open";
  return view;
}

/**
 * Two values of a view alike?
 * @param {unknown} a
 * @param {unknown} b
 */
function alike(a, b) {
  if (a instanceof Set && b instanceof Set) return a.size === b.size && [...a].every((x) => b.has(x));
  if (Array.isArray(a) && Array.isArray(b)) return a.length === b.length && a.every((x, i) => x === b[i]);
  return a === b;
}

/** Holds the view and the window's history together. */
export class State extends EventTarget {
  /** @type {View} */ #view;
  #history;
  #lastQuiet = -Infinity;
  #written = -Infinity;
  /** @type {any} */ #pending;
  #clock;

  /**
   * @param {{history: History, location: Location, listen: (type: string, f: () => void) => void, clock?: () => number}} world
   */
  constructor({ history, location, listen, clock = () => performance.now() }) {
    super();
    this.#history = history;
    this.#clock = clock;
    this.#view = fromQuery(location.search);
    listen("popstate", () => this.#take(fromQuery(location.search)));
  }

  /** @returns {Readonly<View>} */
  get view() {
    return this.#view;
  }

  /**
   * Change some of the view. A run of moves in time is one step of the history.
   * @param {Partial<View>} changes
   * @param {{step?: "new"|"none"}} [options]  "none" writes over the present step of the history
   */
  change(changes, { step = "new" } = {}) {
    const names = Object.keys(changes).filter((name) => !alike(this.#view[name], changes[name]));
    if (!names.length) return;
    const onlyTime = names.length === 1 && names[0] === "minute";
    const now = this.#clock();
    const sameRun = onlyTime && now - this.#lastQuiet < 1200;
    this.#lastQuiet = onlyTime ? now : -Infinity;
    if (!sameRun) this.#finish();
    this.#view = { ...this.#view, ...changes };
    if (sameRun) this.#writeSoon(now);
    else {
      const url = toQuery(this.#view) || "?";
      if (step === "none") this.#history.replaceState(null, "", url);
      else this.#history.pushState(null, "", url);
      this.#written = now;
    }
    this.#tell(names);
  }

  /** Browsers stop a page that writes its address too often: within a run at most ten times a second, and the last. */
  #writeSoon(now) {
    this.#pending ??= setTimeout(() => this.#finish(), Math.max(0, this.#written + 100 - now));
  }

  /** Write what a run has left to write. */
  #finish() {
    if (this.#pending === undefined) return;
    this.#forget();
    this.#written = this.#clock();
    this.#history.replaceState(null, "", toQuery(this.#view) || "?");
  }

  #forget() {
    clearTimeout(this.#pending);
    this.#pending = undefined;
  }

  /** @param {View} view */
  #take(view) {
    this.#forget();
    const filled = { ...view, region: view.region || this.#view.region, day: view.day || this.#view.day };
    const names = Object.keys(filled).filter((name) => !alike(this.#view[name], filled[name]));
    this.#lastQuiet = -Infinity;
    this.#view = filled;
    if (names.length) this.#tell(names);
  }

  /** @param {string[]} names */
  #tell(names) {
    this.dispatchEvent(new CustomEvent("change", { detail: new Set(names) }));
  }
}
