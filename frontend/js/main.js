/**
 * Makes the state, hands each panel its element, and brings what the state asks for. The only file that acts when
 * loaded. One direction: URL -> state -> api -> scene -> panels; panels change the state and never call each other.
 */

import * as api from "./api.js";
import { begin } from "./drawing.js";
import { save } from "./exporting.js";
import { medianDelay, medianMap, sameGrid } from "./figures/compare.js";
import { frameOf } from "./figures/map.js";
import { nearest } from "./figures/strip.js";
import { Live } from "./live.js";
import { quietDays } from "./figures/year.js";
import { ChartPanel } from "./panels/chart.js";
import { ClockPanel } from "./panels/clock.js";
import { FlagsPanel } from "./panels/flags.js";
import { LegendPanel } from "./panels/legend.js";
import { MastheadPanel } from "./panels/masthead.js";
import { make, trouble } from "./panels/parts.js";
import { PlayerPanel } from "./panels/player.js";
import { ReadingPanel, readingOf } from "./panels/reading.js";
import { SeriesPanel } from "./panels/series.js";
import { YearPanel } from "./panels/year.js";
import { State } from "./state.js";
import { dayText, FILE_WORDS, PAGE_WORDS, WORDS } from "./words.js";

/**
 * What the panels draw from.
 * @typedef {object} Scene
 * @property {import("./state.js").View} view
 * @property {import("./api.js").Day} day
 * @property {number} time  ms UTC, an epoch of the day
 * @property {import("./api.js").Window|null} fields  the hour that holds `time`
 * @property {number} index  of `time` in `fields`
 * @property {import("./api.js").SiteStates|null} siteStates
 * @property {import("./api.js").Series|null} series  of the chosen place, null while it is on its way
 * @property {{fields?: import("./api.js").Window, index?: number, label?: string, trouble?: string}|null} other  the map compared with
 * @property {{label: string, place: string, delay: number[]}|null} otherSeries  the delay at the place on the days compared with
 * @property {{lat: number, lon: number, elevation: number, receiver: string}[]} rays
 * @property {number} raysTime  the time they belong to, NaN where none were asked for
 * @property {[number, number][][]} coast
 * @property {import("./colour.js").Theme} theme
 */

for (const [name, put] of Object.entries({
  say: (element, words) => element.prepend(words),
  label: (element, words) => element.setAttribute("aria-label", words),
  role: (element, words) => element.setAttribute("aria-roledescription", words),
})) {
  for (const element of /** @type {NodeListOf<HTMLElement>} */ (document.querySelectorAll(`[data-${name}]`))) put(element, PAGE_WORDS[element.dataset[name] ?? ""]);
}

const at = (id) => /** @type {any} */ (document.getElementById(id));

const state = new State({ history, location, listen: (type, f) => window.addEventListener(type, f) });

const chart = new ChartPanel({ map: at("map"), cells: at("map-cells"), frame: at("map-frame"), title: at("chart-title"), time: at("chart-time"), note: at("map-note"), other: at("other-box"), compared: at("compared"), table: at("map-table") }, state);
const legend = new LegendPanel(at("legend"), state);
const clock = new ClockPanel(
  { strip: at("strip"), names: at("strip-names"), range: at("time"), text: at("time-text"), reason: at("strip-reason"), hint: at("strip-help"), table: at("strip-table") },
  state,
);
const reading = new ReadingPanel(
  { answer: at("answer"), form: at("place-form"), site: at("place-site"), lat: at("place-lat"), lon: at("place-lon"), error: at("place-error") },
  state,
);
const series = new SeriesPanel({ plot: at("series"), line: at("series-now"), note: at("series-note"), table: at("series-table") });
const flags = new FlagsPanel(at("flag-table"), state);
const year = new YearPanel(
  {
    strip: at("year-strip"), marks: at("year-marks"), who: at("year-who"), span: at("year-span"), worst: at("year-worst"), field: at("year-field"), table: at("year-table"),
    note: at("year-note"), versus: at("versus"), how: at("versus-how"),
  },
  state,
);
const live = new Live();

/**
 * A panel whose script comes when it is first looked at.
 * @param {(view: import("./state.js").View) => boolean} wanted @param {() => Promise<any>} bring
 */
function later(wanted, bring) {
  /** @type {any} */ let panel = null;
  /** @type {Promise<void>|null} */ let coming = null;
  return {
    /** @param {Scene} now */
    show(now) {
      if (panel) panel.show(now);
      else if (wanted(now.view)) {
        coming ??= bring().then(
          (made) => {
            panel = made;
            if (scene) panel.show(scene);
          },
          () => {
            coming = null;
            at("announce").textContent = WORDS.offline;
          },
        );
      }
    },
    renew: () => panel?.renew(),
  };
}

const present = later((view) => view.ask === "now", async () => {
  const { PresentPanel } = await import("./panels/present.js");
  return new PresentPanel({ age: at("present-age"), back: at("present-back"), fails: at("present-fails"), flags: at("present-flags"), next: at("present-next"), note: at("present-if"), alerts: at("present-alerts") }, state, live);
});
const network = later((view) => view.ask === "network", async () => {
  const { NetworkPanel } = await import("./panels/network.js");
  return new NetworkPanel({ said: at("network-said"), table: at("network-table"), csv: at("network-csv"), days: at("network-days") }, state);
});
const ahead = later((view) => view.ask === "ahead", async () => {
  const { AheadPanel } = await import("./panels/ahead.js");
  return new AheadPanel(at("ahead-body"), state);
});
const work = later(() => at("work").open, async () => {
  const { WorkPanel } = await import("./panels/work.js");
  return new WorkPanel(at("work"), at("work-body"));
});
const curves = later(() => at("curves").open, async () => {
  const { CurvesPanel } = await import("./panels/curves.js");
  return new CurvesPanel(at("curves"), at("curves-body"));
});
const sites = later(() => at("sites").open, async () => {
  const { SitesPanel } = await import("./panels/sites.js");
  return new SitesPanel(at("sites"), at("sites-body"), () => loadDay());
});
const compared = later(() => at("beside").open, async () => {
  const { ComparedPanel } = await import("./panels/compared.js");
  return new ComparedPanel(at("beside-body"));
});
for (const [fold, panel] of Object.entries({ work, curves, sites, beside: compared })) at(fold).addEventListener("toggle", () => scene && panel.show(scene));
const player = new PlayerPanel({ button: at("play"), rate: at("rate") }, state, () => Boolean(scene?.fields) && scene.index >= 0);
const masthead = new MastheadPanel(
  {
    name: at("region-name"), day: at("day"), before: at("day-before"), after: at("day-after"), clock: at("clock"), layer: at("layer"),
    theme: at("theme"), simulated: at("simulated"), age: at("age"), origin: at("origin"), caution: at("caution"),
    csv: at("flags-csv"), geojson: at("flags-geojson"), png: at("map-png"), svg: at("map-svg"),
    netcdf: at("day-netcdf"), ionex: at("day-ionex"), lines: at("map-lines"), asks: at("asks"), printed: at("printed"), announce: at("announce"),
  },
  state,
  { picture: (format) => chart.picture(format), themeChanged: () => showAll() },
);
/** @type {Promise<import("./panels/files.js")>|null} */ let filesScript = null;
/** @type {import("./panels/files.js").FilesPanel|null} */ let files = null;

/** The sending of files, open or not; it works without any day. */
async function showFiles() {
  if (!state.view.files && !files) return null;
  filesScript ??= import("./panels/files.js");
  const { FilesPanel } = await filesScript;
  files ??= new FilesPanel(at("files"), state, live);
  files.show(scene, state.view.files, [...new Set(days.map((one) => one.region))]);
  return files;
}

at("files-open").addEventListener("click", () => state.change({ files: true }));
at("drop-veil").textContent = FILE_WORDS.drop;
const carriesFiles = (event) => [...(event.dataTransfer?.types ?? [])].includes("Files");
window.addEventListener("dragover", (event) => {
  if (!carriesFiles(event)) return;
  event.preventDefault();
  at("drop-veil").hidden = false;
});
window.addEventListener("dragleave", (event) => {
  if (!event.relatedTarget) at("drop-veil").hidden = true;
});
window.addEventListener("drop", async (event) => {
  if (!carriesFiles(event) || !event.dataTransfer) return;
  event.preventDefault();
  at("drop-veil").hidden = true;
  filesScript ??= import("./panels/files.js");
  // What is carried can be read during this event alone.
  const carried = [...event.dataTransfer.items].filter((one) => one.kind === "file").map((one) => ({ entry: one.webkitGetAsEntry?.() ?? null, file: one.getAsFile() }));
  const { filesOf } = await filesScript;
  state.change({ files: true });
  (await showFiles())?.take(await filesOf(carried));
});

/** Where a key is in use, a file is fetched with it: a plain link would be refused. */
document.addEventListener("click", async (event) => {
  const link = /** @type {HTMLElement} */ (event.target).closest?.("a[href^='/api/']");
  if (!link || !api.hasKey()) return;
  event.preventDefault();
  try {
    const address = link.getAttribute("href") ?? "";
    save(await api.fileOf(address), decodeURIComponent(address.split("?")[0].split("/").pop() ?? "file"));
  } catch (error) {
    at("announce").textContent = error.message;
  }
});
at("map-csv").addEventListener("click", () => chart.textTable());
at("year-csv").addEventListener("click", () => year.textTable());
at("series-csv").addEventListener("click", () => series.textTable());

/** @type {import("./api.js").DayEntry[]} */ let days = [];
/** @type {Scene|null} */ let scene = null;
/** @type {Map<string, Promise<import("./api.js").Window>>} */ const hours = new Map();
/** @type {Record<string, AbortController>} */ const running = {};

/** A signal for one kind of request; asking again ends the one before, so no reply for an old state is drawn. */
function only(kind) {
  running[kind]?.abort();
  running[kind] = new AbortController();
  return running[kind].signal;
}

const gone = (error) => error?.name === "AbortError";

function showAll() {
  if (!scene) return;
  scene.theme = masthead.theme;
  at("main").dataset.ask = scene.view.ask;
  live.want("now", scene.view.ask === "now");
  if (files) showFiles();
  for (const panel of [masthead, year, present, network, chart, legend, clock, reading, series, flags, ahead, work, curves, sites, compared, player]) panel.show(scene);
}

/**
 * The first epoch to look at when the link names none: now, the newest; else the middle of the day's worst flag, or the
 * day's middle.
 */
function firstTime(day) {
  if (state.view.ask === "now") return day.times[day.times.length - 1];
  const rank = { broken: 2, strained: 1 };
  const [worst] = day.flags
    .filter((flag) => flag.state in rank)
    .sort((a, b) => rank[b.state] - rank[a.state] || (b.slope || 0) - (a.slope || 0));
  const wish = worst ? (worst.start + worst.end) / 2 : (day.times[0] + day.times[day.times.length - 1]) / 2;
  return day.times[nearest(day.times, wish)];
}

/** The first place to read when the link names none: the worst site at that time, else the middle of the region. */
function firstPlace(day, siteStates, time) {
  const rank = { broken: 3, strained: 2, holds: 1, unseen: 0 };
  const worth = (number) => rank[siteStates.stateOf(number, time)] ?? 0;
  const [number] = day.sites.map((_site, i) => i).sort((a, b) => worth(b) - worth(a));
  const site = day.sites[number];
  const { south, north, west, east } = day.region;
  return site ? [site.lat, site.lon] : [Number(((south + north) / 2).toFixed(3)), Number(((west + east) / 2).toFixed(3))];
}

async function start() {
  try {
    days = await api.days({ signal: only("days") });
  } catch (error) {
    if (!gone(error)) fail(error, start);
    return;
  }
  masthead.days(days);
  year.days(days);
  showFiles();
  if (!days.length) {
    empty();
    return;
  }
  choose();
  await loadDay();
}

/** Fill what the link leaves open: the newest day of the first region. */
function choose() {
  const { view } = state;
  const region = days.some((d) => d.region === view.region) ? view.region : days[0].region;
  const here = days.filter((d) => d.region === region);
  const newest = here.reduce((a, b) => (b.day > a.day ? b : a)).day;
  const follows = view.ask === "now" && view.minute === null;
  const day = !follows && here.some((d) => d.day === view.day) ? view.day : newest;
  state.change({ region, day }, { step: "none" });
}

async function loadDay() {
  const { region, day } = state.view;
  const signal = only("day");
  for (const kind of ["reading", "series", "rays"]) running[kind]?.abort();
  hours.clear();
  chart.note(scene ? WORDS.loadingDay : "");
  try {
    const [found, siteStates] = await Promise.all([api.day(region, day, { signal }), api.siteStates(region, day, { signal })]);
    const sameRegion = scene?.day.region.key === region;
    const view = state.view;
    const time = view.minute === null ? firstTime(found) : found.times[nearest(found.times, found.start + view.minute * 60000)];
    settling = true;
    scene = { view, day: found, time, fields: null, index: 0, siteStates, series: null, rays: [], raysTime: NaN, other: null, otherSeries: null, coast: sameRegion ? scene.coast : [], theme: masthead.theme };
    state.change(
      { minute: view.ask === "now" && view.minute === null ? null : Math.round((time - found.start) / 60000), place: view.place ?? /** @type {[number, number]} */ (firstPlace(found, siteStates, time)) },
      { step: "none" },
    );
    settling = false;
    scene.view = state.view;
    at("main").dataset.loading = "false";
    delete at("main").dataset.bare;
    showAll();
    await Promise.all([loadFields(), sameRegion ? null : loadCoast(signal), loadPlace(), loadRays(), loadOther(), loadOtherSeries()]);
  } catch (error) {
    if (!gone(error)) fail(error, loadDay);
  }
}

/** A chart without its coast still answers; it says that the lines are missing. */
async function loadCoast(signal) {
  const mine = scene;
  try {
    mine.coast = await api.coast(frameOf(mine.day.grid), mine.day.region.key, { signal });
    if (mine === scene) chart.show(scene);
  } catch (error) {
    if (!gone(error)) chart.note(error.message);
  }
}

/** The maps of the hour that holds the time, of this day or of another; an hour once fetched stays until the day changes. */
function hourOf(time, other = "") {
  const { day, view } = scene;
  const date = other || view.day;
  const shift = other ? Date.parse(other) - Date.parse(view.day) : 0;
  const first = day.times[0] - 1000;
  const number = Math.floor((time - first) / 3600000);
  const key = `${date} ${number}`;
  let promise = hours.get(key);
  if (!promise) {
    const from = first + number * 3600000 + shift;
    promise = api.fields(view.region, date, from, from + 3600000);
    hours.set(key, promise);
    promise.catch(() => hours.delete(key));
  }
  return promise;
}

/** The days to compare with, and what they are called. */
function othersOf({ versus, region, day }) {
  const dates = versus === "quiet" ? quietDays(days.filter((entry) => entry.region === region), day) : [versus];
  return { dates, label: versus === "quiet" ? WORDS.quietMedian(dates.length) : dayText(versus) };
}

/** The delay at the chosen place on the days compared with. Without it the map still compares. */
async function loadOtherSeries() {
  const mine = scene;
  const { view, day } = mine;
  running.otherSeries?.abort();
  mine.otherSeries = null;
  if (!view.versus || view.ask !== "past" || !view.place) return;
  const { dates, label } = othersOf(view);
  const signal = only("otherSeries");
  try {
    const found = await Promise.all(dates.map((date) => api.series(view.region, date, view.place, day.region.unseenSigma, { signal })));
    if (mine !== scene || scene.view.versus !== view.versus || !found.length) return;
    const shifts = dates.map((date) => Date.parse(date) - Date.parse(view.day));
    mine.otherSeries = { label, place: view.place.join(), delay: medianDelay(found, shifts, day.times) };
    series.show(scene);
  } catch (error) {
    if (!gone(error)) at("announce").textContent = error.message;
  }
}

/** The map to compare with, at the same time of day: of one day, or the median of the quiet days around. */
async function loadOther() {
  const mine = scene;
  const { view, time } = mine;
  if (!view.versus || view.ask !== "past") {
    mine.other = null;
    return;
  }
  const { dates, label } = othersOf(view);
  try {
    if (!dates.length) throw new Error(WORDS.noQuiet);
    const windows = await Promise.all(dates.map((date) => hourOf(time, date)));
    const maps = windows
      .map((fields, i) => {
        const wish = time + Date.parse(dates[i]) - Date.parse(view.day);
        return { fields, index: nearest(fields.times, wish), wish };
      })
      .filter(({ fields, index, wish }) => Math.abs(fields.times[index] - wish) <= 1800000);
    if (!maps.length) throw new Error(WORDS.otherMissing);
    const own = await hourOf(time);
    if (mine !== scene || scene.time !== time || scene.view.versus !== view.versus) return;
    if (!maps.every(({ fields }) => sameGrid(fields, own))) throw new Error(WORDS.otherGrid);
    mine.other = { ...(view.versus === "quiet" ? medianMap(maps, mine.day.region.unseenSigma) : maps[0]), label };
  } catch (error) {
    if (mine !== scene || scene.time !== time) return;
    mine.other = { trouble: error.message };
  }
  chart.show(scene);
  legend.show(scene);
}

async function loadFields() {
  const mine = scene;
  const wanted = scene.time;
  const slow = setTimeout(() => mine === scene && wanted === scene.time && chart.note(WORDS.loadingMap), 250);
  try {
    const fields = await hourOf(wanted);
    clearTimeout(slow);
    if (mine !== scene || wanted !== scene.time) return;
    chart.note("");
    scene.fields = fields;
    scene.index = nearest(fields.times, wanted);
    chart.show(scene);
    legend.show(scene);
    begin();
    // The hours to either side come while the reader looks.
    const { day } = scene;
    for (const away of [3600000, -3600000]) {
      const next = wanted + away;
      if (next >= day.times[0] && next <= day.times[day.times.length - 1]) hourOf(next).catch(() => {});
    }
  } catch (error) {
    clearTimeout(slow);
    begin();
    if (mine === scene && wanted === scene.time) chart.note(error.message, loadFields);
  }
}

/** True while a loaded day fills what the link left open: that is no wish of the reader. */
let settling = false;
let readingSoon = 0;

async function loadReading() {
  clearTimeout(readingSoon);
  const { view, time } = scene;
  if (!view.place) return;
  reading.wait();
  try {
    const found = await api.reading(view.region, view.day, view.place, time, { signal: only("reading") });
    if (!scene || scene.time !== time) return;
    reading.answer(readingOf(scene) ?? found, scene);
    // Moving the time speaks through the strip; a new place speaks here.
    if (document.activeElement !== at("strip") && document.activeElement !== at("time")) at("announce").textContent = found.sentence;
  } catch (error) {
    if (!gone(error)) reading.fail(error, loadReading);
  }
}

async function loadSeries() {
  const { view } = scene;
  if (!view.place) {
    series.give(null);
    return;
  }
  try {
    const found = await api.series(view.region, view.day, view.place, scene.day.region.unseenSigma, { signal: only("series") });
    series.give(found);
    scene.series = found;
    clock.show(scene);
    readNow();
  } catch (error) {
    if (!gone(error)) {
      series.give(null);
      at("announce").textContent = error.message;
    }
  }
}

/** The reading from the numbers already here. @returns {boolean}  were they here */
function readNow() {
  const found = readingOf(scene);
  if (!found) return false;
  clearTimeout(readingSoon);
  running.reading?.abort();
  reading.answer(found, scene);
  return true;
}

const loadPlace = () => Promise.all([loadReading(), loadSeries()]);

async function loadRays() {
  const { view, time } = scene;
  if (!view.show.has("rays")) {
    running.rays?.abort();
    scene.rays = [];
    scene.raysTime = NaN;
    return;
  }
  try {
    const rays = await api.rays(view.region, view.day, time, { signal: only("rays") });
    if (scene.time !== time) return;
    scene.rays = rays;
    scene.raysTime = time;
    chart.show(scene);
  } catch (error) {
    if (!gone(error)) chart.note(error.message);
  }
}

/** Without a day there is nothing but words and the way out. @param {...Node} words */
function bare(...words) {
  at("main").dataset.loading = "false";
  at("main").dataset.bare = "true";
  at("answer").setAttribute("aria-busy", "false");
  at("answer").replaceChildren(...words);
  chart.note("");
}

function fail(error, again) {
  bare(trouble(error, () => again()));
}

function empty() {
  at("region-name").textContent = WORDS.emptyArchive;
  bare(make("p", { class: "lead", text: WORDS.emptyArchive }), make("p", { class: "reason", text: WORDS.emptyArchiveHow }), make("button", { type: "button", text: FILE_WORDS.title, click: () => state.change({ files: true }) }));
}

state.addEventListener("change", (event) => {
  const changed = /** @type {CustomEvent<Set<string>>} */ (event).detail;
  if (changed.has("files")) showFiles();
  if (!scene || settling) return;
  if (changed.has("ask") && state.view.ask === "now" && state.view.minute === null) {
    follow();
    choose();
  }
  if (state.view.region !== scene.view.region || state.view.day !== scene.day.day) {
    loadDay();
    return;
  }
  scene.view = state.view;
  if (changed.has("minute")) {
    const { day } = scene;
    scene.time = state.view.minute === null ? firstTime(day) : day.times[nearest(day.times, day.start + state.view.minute * 60000)];
    const held = scene.fields?.times.findIndex((ms) => ms === scene.time) ?? -1;
    if (held >= 0) scene.index = held;
    else {
      scene.index = -1;
      loadFields();
    }
    if (scene.view.show.has("rays")) loadRays();
    clearTimeout(readingSoon);
    if (!readNow()) {
      running.reading?.abort();
      at("answer").setAttribute("aria-busy", "true");
      readingSoon = window.setTimeout(loadReading, 120);
    }
  }
  if (changed.has("ask") || changed.has("versus") || (changed.has("minute") && scene.view.versus)) {
    if (changed.has("versus")) scene.other = null;
    loadOther();
    if (!changed.has("minute")) loadOtherSeries();
  }
  if (changed.has("show")) loadRays();
  if (changed.has("place")) {
    loadPlace();
    if (scene.view.versus) loadOtherSeries();
  }
  showAll();
});

/** Ask which days are stored; true where that changed. */
async function renewDays() {
  const found = await api.days({ signal: only("days") });
  if (JSON.stringify(found) === JSON.stringify(days)) return false;
  days = found;
  masthead.days(days);
  year.days(days);
  network.renew();
  ahead.renew();
  return true;
}

/** Now follows the newest day: a new one, or one written anew, is opened; nothing is asked while nobody looks. */
async function follow() {
  if (!scene || document.hidden || state.view.ask !== "now" || state.view.minute !== null) return;
  try {
    if (!(await renewDays())) return;
    settling = true;
    choose();
    settling = false;
    await loadDay();
  } catch (error) {
    if (!gone(error)) at("announce").textContent = error.message;
  }
}

setInterval(follow, 30000);
document.addEventListener("visibilitychange", follow);

/** A day is new, or was computed anew: the lists know it at once, and Now shows it. */
let daysSoon = 0;
live.addEventListener("day", (event) => {
  const { region, day, version } = /** @type {CustomEvent} */ (event).detail;
  const known = days.find((one) => one.region === region && one.day === day);
  if (known?.version === version) return;
  clearTimeout(daysSoon);
  daysSoon = window.setTimeout(async () => {
    if (state.view.ask === "now" && state.view.minute === null && scene) await follow();
    else if (!scene) await start();
    else if (await renewDays().catch(() => false)) showAll();
  }, 300);
});

window.addEventListener("error", (event) => {
  at("announce").textContent = event.message;
});

start();
