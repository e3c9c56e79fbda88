/**
 * Every address of the service and every fetch: JSON in, typed arrays and milliseconds (UTC) out.
 * Never draws, never keeps: what is wanted twice is kept by the caller.
 */

import { WORDS } from "./words.js";

/**
 * @typedef {object} DayEntry
 * @property {string} region
 * @property {string} day
 * @property {boolean} simulated
 * @property {number} version
 * @property {string} saved   when it was written
 * @property {Record<string, number>} shares  state -> share of all cells and times
 * @property {Record<string, Record<string, number>>} siteShares
 * @property {number} slope   mm/km that 99 of 100 seen cells stay under, NaN where not told
 * @property {number} kp      the highest of the day, NaN where no indices were imported
 * @property {number} ap      the day's mean
 * @property {number} flags
 */
/**
 * @typedef {{receiver: string, satellite: string, times: number[], delay: number[], sigma: number, change: number,
 *   distance: number, elevation: number}} Sightline
 */
/**
 * @typedef {{name: string, lat: number, lon: number, kind: string}} Site
 * @typedef {object} Flag
 * @property {number} start  ms UTC
 * @property {number} end
 * @property {number} lat
 * @property {number} lon
 * @property {"slope"|"front"|"irregular"|"fault"} kind
 * @property {number} slope  mm/km, NaN where it has none
 * @property {number} sigma
 * @property {number} speed  m/s
 * @property {number} speedSigma  m/s, NaN where it is not known
 * @property {number} heading  degrees, toward
 * @property {import("./colour.js").StateName} state
 * @property {string} evidence
 * @property {boolean} confirmed
 * @property {{time: number, lat: number, lon: number}[]} track
 * @property {number} [distanceKm]
 */
/**
 * @typedef {object} Day
 * @property {string} day
 * @property {{key: string, name: string, south: number, north: number, west: number, east: number, timezone: string,
 *   unseenSigma: number, thresholds: Record<string, number>}} region
 * @property {number} start  00:00 UTC of the day, ms
 * @property {number[]} times  epochs, ms UTC
 * @property {{lats: Float64Array, lons: Float64Array}} grid
 * @property {{delay: [number, number], uncertainty: [number, number], slope: [number, number]}} ends
 * @property {Site[]} sites
 * @property {{name: string, lat: number, lon: number}[]} receivers
 * @property {Flag[]} flags
 * @property {boolean} simulated
 * @property {number} processed  ms UTC, 0 where not told
 * @property {string[]} warnings
 * @property {string} caution
 */
/**
 * @typedef {object} Window
 * @property {number[]} times
 * @property {Float64Array} lats
 * @property {Float64Array} lons
 * @property {Record<"delay"|"uncertainty"|"slope"|"support"|"state", Float32Array|Uint16Array|Uint8Array>} layers  flat (time, lat, lon)
 */
/**
 * @typedef {object} SiteStates
 * @property {number[]} times
 * @property {{name: string, codes: number[], reasons: string[]}[]} rows
 * @property {number} serial
 * @property {(row: number, time: number) => import("./colour.js").StateName} stateOf
 * @property {(row: number, time: number) => string} reasonOf
 */
/**
 * @typedef {object} Reading
 * @property {number} lat
 * @property {number} lon
 * @property {number} time
 * @property {import("./colour.js").StateName} state
 * @property {string} sentence
 * @property {number} delay
 * @property {number} delaySigma
 * @property {number} slope
 * @property {number} slopeSigma
 * @property {number} slopeHeading  degrees toward which the delay grows, NaN where not known
 * @property {number} support
 * @property {Flag[]} flags  nearest first
 */
/**
 * @typedef {{lat: number, lon: number, times: number[], delay: number[], sigma: number[], slope: number[],
 *   slopeSigma: number[], slopeHeading: number[], support: number[], sentence: string[],
 *   place: [number, number], state: import("./colour.js").StateName[]}} Series
 */
/** @typedef {{signal?: AbortSignal}} How */

/** A failure the service put into words. */
export class ServiceError extends Error {
  /** @param {string} message @param {string} kind @param {number} status */
  constructor(message, kind, status) {
    super(message);
    this.name = "ServiceError";
    this.kind = kind;
    this.status = status;
  }
}

/** The key of a server that asks for one: kept for this tab, until it closes. */
let key = "";
try {
  key = sessionStorage.getItem("skylag.key") ?? "";
} catch {
  // A browser that keeps nothing asks again after a reload.
}

/** @param {string} text */
export function useKey(text) {
  key = text.trim();
  try {
    sessionStorage.setItem("skylag.key", key);
  } catch {
    // kept for this page alone
  }
}

/** Is a key in use? Then a plain link to a file would be refused: it is fetched with the key. */
export const hasKey = () => key !== "";

/** @param {string} [accept] @returns {Record<string, string>} */
const headers = (accept = "application/json") => (key ? { Accept: accept, Authorization: `Bearer ${key}` } : { Accept: accept });

/** @param {string} address @param {How & {method?: string, body?: Blob}} [how] */
async function ask(address, { signal, method = "GET", body } = {}) {
  let answer;
  try {
    answer = await fetch(address, { method, signal, body, headers: headers() });
  } catch (error) {
    if (error.name === "AbortError") throw error;
    throw new ServiceError(WORDS.offline, "Offline", 0);
  }
  const content = await answer.json().catch((error) => {
    if (error.name === "AbortError") throw error;
    return null;
  });
  if (!answer.ok || !content) {
    throw new ServiceError(content?.error ?? `${WORDS.strangeAnswer} (${answer.status})`, content?.kind ?? "", answer.status);
  }
  return content;
}

const milliseconds = (text) => Date.parse(text);
const number = (value) => (value === null || value === undefined ? NaN : value);
const numbers = (values) => values.map(number);
const instant = (ms) => encodeURIComponent(new Date(ms).toISOString());
const dayAddress = (region, day) => `/api/days/${encodeURIComponent(region)}/${encodeURIComponent(day)}`;

/**
 * An array as the service packs it: dtype, shape, base64 of little-endian bytes.
 * @param {{dtype: "float32"|"uint8"|"uint16", base64: string}} packed
 */
export function unpack({ dtype, base64 }) {
  const text = atob(base64);
  const bytes = new Uint8Array(text.length);
  for (let i = 0; i < text.length; i++) bytes[i] = text.charCodeAt(i);
  if (dtype === "uint8") return bytes;
  const view = new DataView(bytes.buffer);
  if (dtype === "uint16") return Uint16Array.from({ length: bytes.length / 2 }, (_, i) => view.getUint16(2 * i, true));
  return Float32Array.from({ length: bytes.length / 4 }, (_, i) => view.getFloat32(4 * i, true));
}

/** @returns {Flag} */
function flagOf(raw) {
  return {
    start: milliseconds(raw.start_utc),
    end: milliseconds(raw.end_utc),
    lat: number(raw.lat_deg),
    lon: number(raw.lon_deg),
    kind: raw.kind,
    slope: number(raw.slope_mm_per_km),
    sigma: number(raw.sigma_mm_per_km),
    speed: number(raw.speed_m_s),
    speedSigma: number(raw.speed_sigma_m_s),
    heading: number(raw.heading_deg),
    state: raw.state,
    evidence: raw.evidence,
    confirmed: raw.confirmed,
    track: (raw.track ?? []).map(([time, lat, lon]) => ({ time: milliseconds(time), lat, lon })),
    distanceKm: number(raw.distance_km),
  };
}

/** A file of the service, fetched with the key. @param {string} address */
export async function fileOf(address) {
  const answer = await fetch(address, { headers: headers("*/*") });
  if (!answer.ok) throw new ServiceError((await answer.json().catch(() => null))?.error ?? `${WORDS.strangeAnswer} (${answer.status})`, "", answer.status);
  return answer.blob();
}

/** Begin to send files. @param {How} [how] */
export async function openBatch(how) {
  const raw = await ask("/api/batches", { ...how, method: "POST" });
  return { batch: raw.batch, fileBytes: raw.file_bytes, batchBytes: raw.batch_bytes, batchFiles: raw.batch_files };
}

/**
 * Send one file as it is; `progress` hears the share that is sent.
 * @param {string} batch @param {File} file @param {{signal: AbortSignal, progress: (share: number) => void}} how
 * @returns {Promise<{kind: string, keptAs: string, marker: string, day: string}>}
 */
export function sendFile(batch, file, { signal, progress }) {
  return new Promise((resolve, reject) => {
    const request = new XMLHttpRequest(); // fetch does not tell how much is sent
    request.open("PUT", `/api/batches/${batch}/files?name=${encodeURIComponent(file.name.slice(-200))}`);
    for (const [name, value] of Object.entries(headers())) request.setRequestHeader(name, value);
    request.responseType = "json";
    request.upload.addEventListener("progress", ({ loaded, total }) => progress(total ? loaded / total : 0));
    request.addEventListener("load", () => {
      const content = request.response;
      if (request.status === 201) resolve({ kind: content.kind, keptAs: content.kept_as, marker: content.marker, day: content.day ?? "" });
      else reject(new ServiceError(content?.error ?? `${WORDS.strangeAnswer} (${request.status})`, content?.kind ?? "", request.status));
    });
    request.addEventListener("error", () => reject(new ServiceError(WORDS.offline, "Offline", 0)));
    request.addEventListener("abort", () => reject(new DOMException("", "AbortError")));
    signal.addEventListener("abort", () => request.abort());
    request.send(file);
  });
}

/**
 * @typedef {{id: number, title: string, state: "waiting"|"running"|"done"|"failed"|"cancelled", stage: string, share: number, word: string,
 *   said: string, day: string, files: string[], resultRegion: string, changed: number, nextTry: number}} Task
 */

/** @returns {Task} */
function taskOf(raw) {
  return {
    id: raw.id, title: raw.title, state: raw.state, stage: raw.stage, share: raw.share, word: raw.word, said: raw.said, day: raw.day ?? "", files: raw.files,
    resultRegion: raw.result.region ?? "", changed: milliseconds(raw.changed_utc), nextTry: raw.next_try_utc ? milliseconds(raw.next_try_utc) : NaN,
  };
}

/** Queue the days of what was sent. @param {string} batch @param {string} region  "" draws one around the receivers @param {How} [how] */
export async function beginWork(batch, region, how) {
  const raw = await ask(`/api/batches/${batch}/work?region=${encodeURIComponent(region)}`, { ...how, method: "POST" });
  return { tasks: raw.tasks.map(taskOf), leftOut: raw.left_out };
}

/** The queue, newest first. @param {How} [how] @returns {Promise<Task[]>} */
export async function work(how) {
  return (await ask("/api/work", how)).tasks.map(taskOf);
}

/** Take a task off the queue, or queue it once more. @param {number} id @param {"cancel"|"again"} what @returns {Promise<Task>} */
export async function changeTask(id, what) {
  return taskOf(await ask(`/api/work/${id}/${what}`, { method: "POST" }));
}

/** @typedef {{id: number, subject: string, sentence: string, made: number, facts: Record<string, any>, deliveries: {way: string, delivered_utc: string|null}[]}} Notice */
/** @returns {Notice} */
const noticeOf = (raw) => ({ ...raw, made: milliseconds(raw.made_utc) });

/** What alerts told, newest first. @param {How} [how] @returns {Promise<Notice[]>} */
export async function notices(how) {
  return (await ask("/api/notices", how)).notices.map(noticeOf);
}

/**
 * Follow along until the server hangs up: tasks, days and notices that change. Read by fetch, since an EventSource cannot
 * send a key.
 * @param {(kind: "work"|"day"|"notice", what: any) => void} hear @param {AbortSignal} signal
 */
export async function news(hear, signal) {
  const answer = await fetch("/api/work/news", { signal, headers: headers("text/event-stream") });
  if (!answer.ok || !answer.body) throw new ServiceError(`${WORDS.strangeAnswer} (${answer.status})`, "", answer.status);
  const reader = answer.body.pipeThrough(new TextDecoderStream()).getReader();
  for (let rest = ""; ; ) {
    const { done, value } = await reader.read();
    if (done) return;
    const parts = (rest + value).split("\n\n");
    rest = parts.pop() ?? "";
    for (const part of parts) {
      const found = /^event: (\w+)\ndata: (.*)$/.exec(part);
      if (!found) continue;
      const raw = JSON.parse(found[2]);
      hear(/** @type {any} */ (found[1]), found[1] === "work" ? taskOf(raw) : found[1] === "notice" ? noticeOf(raw) : raw);
    }
  }
}

/** Stored days, newest first. @param {How} [how] @returns {Promise<DayEntry[]>} */
export async function days(how) {
  const { days: entries } = await ask("/api/days", how);
  return entries.map((raw) => ({
    region: raw.region,
    day: raw.day,
    version: raw.version,
    simulated: raw.simulated,
    saved: `${raw.saved_at_utc} ${raw.version}`,
    shares: raw.state_shares,
    siteShares: raw.site_shares,
    slope: number(raw.highest?.slope),
    kp: number(raw.activity?.kp_highest),
    ap: number(raw.activity?.ap_daily),
    flags: Object.values(raw.flag_counts).reduce((a, b) => a + b, 0),
  }));
}

/** The facts of a day, with its flags. @param {string} region @param {string} date @param {How} [how] @returns {Promise<Day>} */
export async function day(region, date, how) {
  const [raw, flags] = await Promise.all([
    ask(dayAddress(region, date), how),
    ask(`${dayAddress(region, date)}/flags`, how),
  ]);
  return {
    day: raw.day,
    region: {
      key: region,
      name: raw.region.name,
      south: raw.region.south,
      north: raw.region.north,
      west: raw.region.west,
      east: raw.region.east,
      timezone: raw.region.timezone,
      unseenSigma: raw.region.thresholds.unseen_sigma_m,
      thresholds: raw.region.thresholds,
    },
    start: Date.parse(`${raw.day}T00:00:00Z`),
    times: raw.times_utc.map(milliseconds),
    grid: { lats: Float64Array.from(raw.grid.lats), lons: Float64Array.from(raw.grid.lons) },
    ends: { delay: raw.scales.vertical_delay, uncertainty: raw.scales.vertical_delay_sigma, slope: raw.scales.slope },
    sites: raw.sites,
    receivers: raw.receivers,
    flags: flags.flags.map(flagOf).sort((a, b) => a.start - b.start),
    simulated: raw.simulated,
    processed: raw.saved_at_utc ? milliseconds(raw.saved_at_utc) : 0,
    warnings: raw.warnings,
    caution: raw.caution,
  };
}

/**
 * Maps with from <= time < to.
 * @param {string} region @param {string} date @param {number} from @param {number} to @param {How} [how]
 * @returns {Promise<Window>}
 */
export async function fields(region, date, from, to, how) {
  const layers = "vertical_delay,vertical_delay_sigma,slope,support,state";
  const raw = await ask(`${dayAddress(region, date)}/fields?from=${instant(from)}&to=${instant(to)}&layers=${layers}`, how);
  return {
    times: raw.times_utc.map(milliseconds),
    lats: Float64Array.from(raw.lats),
    lons: Float64Array.from(raw.lons),
    layers: {
      delay: unpack(raw.layers.vertical_delay),
      uncertainty: unpack(raw.layers.vertical_delay_sigma),
      slope: unpack(raw.layers.slope),
      support: unpack(raw.layers.support),
      state: unpack(raw.layers.state),
    },
  };
}

/** Pierce points at a time. @param {string} region @param {string} date @param {number} time @param {How} [how] */
export async function rays(region, date, time, how) {
  const raw = await ask(`${dayAddress(region, date)}/rays?time=${instant(time)}`, how);
  return raw.pierce_lat.map((lat, i) => ({ lat, lon: raw.pierce_lon[i], elevation: raw.elevation[i], receiver: raw.receiver[i] }));
}

/** Degrees from north through east. */
const headingOf = (east, north) => ((Math.atan2(east, north) * 180) / Math.PI + 360) % 360;

/**
 * What is known at a place and time.
 * @param {string} region @param {string} date @param {[number, number]} place @param {number} time @param {How} [how]
 * @returns {Promise<Reading>}
 */
export async function reading(region, date, [lat, lon], time, how) {
  const raw = await ask(`${dayAddress(region, date)}/reading?lat=${lat}&lon=${lon}&time=${instant(time)}`, how);
  return {
    lat: raw.lat,
    lon: raw.lon,
    time: milliseconds(raw.time_utc),
    state: raw.state,
    sentence: raw.sentence,
    delay: number(raw.vertical_delay),
    delaySigma: number(raw.vertical_delay_sigma),
    slope: number(raw.slope),
    slopeSigma: number(raw.slope_sigma),
    slopeHeading: headingOf(number(raw.slope_east), number(raw.slope_north)),
    support: number(raw.support),
    flags: raw.flags.map(flagOf),
  };
}

/**
 * The day at a place. Where it is unseen whether corrections hold, the delay may still be known: seen, and to within the
 * limit of its sigma. The slope then tells too little.
 * @param {string} region @param {string} date @param {[number, number]} place @param {number} unseenSigma  m @param {How} [how]
 * @returns {Promise<Series>}
 */
export async function series(region, date, [lat0, lon0], unseenSigma, how) {
  const raw = await ask(`${dayAddress(region, date)}/series?lat=${lat0}&lon=${lon0}`, how);
  const known = raw.state.map((state, i) => state !== "unseen" || (raw.support[i] > 0 && number(raw.vertical_delay_sigma[i]) <= unseenSigma));
  const seen = (values) => values.map((v, i) => (known[i] ? number(v) : NaN));
  const steep = (values) => values.map((v, i) => (raw.state[i] === "unseen" ? NaN : number(v)));
  return {
    lat: lat0,
    lon: lon0,
    times: raw.times_utc.map(milliseconds),
    delay: seen(raw.vertical_delay),
    sigma: seen(raw.vertical_delay_sigma),
    slope: steep(raw.slope),
    slopeSigma: steep(raw.slope_sigma),
    slopeHeading: raw.slope_east.map((east, i) => headingOf(number(east), number(raw.slope_north[i]))),
    support: raw.support,
    sentence: raw.sentence,
    place: [lat0, lon0],
    state: raw.state,
  };
}

let serial = 0;

/** States of the sites through a day. @param {string} region @param {string} date @param {How} [how] @returns {Promise<SiteStates>} */
export async function siteStates(region, date, how) {
  const raw = await ask(`${dayAddress(region, date)}/site-states`, how);
  const times = raw.times_utc.map(milliseconds);
  const rows = raw.sites.map((site, i) => ({ name: site.name, codes: raw.codes[i], reasons: raw.reasons[i] ?? [] }));
  const half = times.length > 1 ? (times[1] - times[0]) / 2 : Infinity;
  /** The epoch that holds a time, or -1 where no epoch is near: then nothing is known. */
  const epoch = (time) => {
    let best = -1;
    for (let i = 0; i < times.length; i++) {
      if (Math.abs(times[i] - time) <= half && (best < 0 || Math.abs(times[i] - time) < Math.abs(times[best] - time))) best = i;
    }
    return best;
  };
  serial += 1;
  return {
    times,
    rows,
    serial,
    stateOf: (row, time) => raw.states[rows[row]?.codes[epoch(time)] ?? 0],
    reasonOf: (row, time) => rows[row]?.reasons[epoch(time)] ?? "",
  };
}

/**
 * Coast lines within a box, as lines of lat, lon.
 * @param {{south: number, north: number, west: number, east: number}} box @param {string} region @param {How} [how]
 * @returns {Promise<[number, number][][]>}
 */
export async function coast({ south, north, west, east }, region, how) {
  const raw = await ask(
    `/api/coast?south=${south}&north=${north}&west=${west}&east=${east}&region=${encodeURIComponent(region)}`,
    how,
  );
  return raw.lines.map((line) => line.lat.map((lat, i) => [lat, line.lon[i]]));
}

/** Address of the day's flags as a file. @param {string} region @param {string} date @param {"csv"|"geojson"} kind */
export function flagsFile(region, date, kind) {
  return `${dayAddress(region, date)}/flags.${kind}`;
}

/** Addresses of the whole day's maps as files. @param {string} region @param {string} date @param {"field.nc"|"maps.inx"} name */
export function dayFile(region, date, name) {
  return `${dayAddress(region, date)}/${name}`;
}

/** Where the lines of equal delay of a map lie. @param {string} region @param {string} date @param {number} time */
export const linesFile = (region, date, time) => `${dayFile(region, date, "lines.geojson")}?time=${instant(time)}`;

/**
 * Lines of sight that pass near a place around a time.
 * @param {string} region @param {string} date @param {[number, number]} place @param {number} time @param {How} [how]
 * @returns {Promise<Sightline[]>}
 */
export async function witnesses(region, date, [lat, lon], time, how) {
  const { lines } = await ask(`${dayAddress(region, date)}/witnesses?lat=${lat}&lon=${lon}&time=${instant(time)}`, how);
  return lines.map((raw) => ({
    receiver: raw.receiver,
    satellite: raw.satellite,
    times: raw.times_utc.map(milliseconds),
    delay: numbers(raw.vertical_delay),
    sigma: number(raw.vertical_delay_sigma),
    change: number(raw.change_m),
    distance: raw.distance_km,
    elevation: number(raw.elevation),
  }));
}

/**
 * What each receiver gave, newest day first.
 * @param {string} region @param {How} [how]
 */
export async function network(region, how) {
  const raw = await ask(`/api/network?region=${encodeURIComponent(region)}`, how);
  return raw.days.map(({ day: date, receivers }) => ({
    day: date,
    receivers: receivers.map((one) => ({
      name: one.name,
      received: number(one.received),
      gaps: number(one.gaps),
      slips: number(one.slips),
      arcs: number(one.arcs),
      level: number(one.level_sigma_tecu),
      leftOut: number(one.left_out_rms_tecu),
      leftOutSigma: number(one.left_out_sigma_tecu),
      faults: one.faults,
      biases: one.biases.map((bias) => ({ pair: bias.pair, value: number(bias.bias_ns), sigma: number(bias.sigma_ns) })),
    })),
  }));
}

const spanOf = (raw) => ({ ...raw, start: milliseconds(raw.start_utc), end: milliseconds(raw.end_utc) });
/** Words of a question, without those that are empty. @param {Record<string, string|number>} words */
const query = (words) => Object.entries(words).filter(([, value]) => value !== "").map(([name, value]) => `${name}=${encodeURIComponent(value)}`).join("&");

/** Address of what a day means for a job or a site, in the service's own words. @param {string} region @param {string} date @param {string} file @param {Record<string, string|number>} words */
export function siteFile(region, date, file, words) {
  return `${dayAddress(region, date)}/${file}?${query(words)}`;
}

/** Windows of survey work, and the numbers behind them. @param {string} region @param {string} date @param {Record<string, string>} job @param {How} [how] */
export async function survey(region, date, job, how) {
  const raw = await ask(siteFile(region, date, "survey", job), how);
  return {
    name: raw.job.name, windows: raw.windows.map(spanOf), assumptions: raw.assumptions, times: raw.times_utc.map(milliseconds), hours: raw.hours_utc.map(milliseconds),
    index: numbers(raw.index_ppm), indexWords: raw.index_words, longest: numbers(raw.longest_km), fixing: numbers(raw.fixing),
    differential68: numbers(raw.differential_68), differential95: numbers(raw.differential_95),
  };
}

/** Was it the ionosphere? @param {string} region @param {string} date @param {Record<string, string>} job @param {string} time @param {How} [how] */
export async function surveyWhy(region, date, job, time, how) {
  return ask(siteFile(region, date, "survey/why", { ...job, time }), how);
}

/** Approaches of an aerodrome. @param {string} region @param {string} date @param {Record<string, string>} service @param {How} [how] */
export async function approaches(region, date, service, how) {
  const raw = await ask(siteFile(region, date, "approaches", service), how);
  return { levels: raw.levels.map((one) => one.name), share: raw.sites[0]?.share ?? {}, outages: raw.outages.map(spanOf), assumptions: raw.assumptions };
}

/**
 * @typedef {{site: string, time: number, minutes: number, giveOrTake: number, speed: number, heading: number}} Coming
 * a front on its way to a site: when (ms UTC), in how many minutes, two sigmas of that in minutes
 */
/** The front that reaches each site next after a time. @param {string} region @param {string} date @param {number} time @param {How} [how] @returns {Promise<{hours: number, coming: Coming[]}>} */
export async function coming(region, date, time, how) {
  const raw = await ask(`${dayAddress(region, date)}/coming?time=${instant(time)}`, how);
  return {
    hours: raw.hours_ahead,
    coming: raw.coming.map((one) => ({ site: one.site, time: milliseconds(one.expected_utc), minutes: one.minutes, giveOrTake: one.give_or_take_min, speed: number(one.speed_m_s), heading: number(one.heading_deg) })),
  };
}

/** Ground-based augmentation of an aerodrome: minutes of each kind, and the front that comes next. @param {string} region @param {string} date @param {string} site @param {number} time @param {How} [how] */
export async function ground(region, date, site, time, how) {
  const raw = await ask(siteFile(region, date, "ground", { site, time: new Date(time).toISOString() }), how);
  return { minutes: raw.minutes, next: raw.next_front?.words ?? "", assumptions: raw.assumptions };
}

const sitesOf = (raw) => ({
  revision: raw.revision, writing: raw.writing, problems: raw.problems, gone: raw.gone,
  sites: raw.sites.map((one) => ({ name: one.name, lat: one.lat, lon: one.lon, kind: one.kind, onMap: one.on_map })),
  history: raw.history.map((one) => ({ said: one.said, made: milliseconds(one.made_utc) })),
});
const sitesAddress = (region) => `/api/sites/${encodeURIComponent(region)}`;

/** The sites of a region. @param {string} region @param {How} [how] */
export const sites = async (region, how) => sitesOf(await ask(sitesAddress(region), how));

/** Add or change a site. @param {string} region @param {Record<string, string|number>} words */
export const putSite = async (region, words) => sitesOf(await ask(`${sitesAddress(region)}?${query(words)}`, { method: "PUT" }));

/** Take a site away. @param {string} region @param {string} name @param {number} after */
export const removeSite = async (region, name, after) => sitesOf(await ask(`${sitesAddress(region)}?${query({ name, after })}`, { method: "DELETE" }));

/** Take in a list. @param {string} region @param {Blob} body @param {number} after */
export const takeInSites = async (region, body, after) => sitesOf(await ask(`${sitesAddress(region)}/list?${query({ after })}`, { method: "POST", body }));

/** A published map beside a day. @param {string} region @param {string} date @param {File} file @param {How} [how] */
export async function beside(region, date, file, how) {
  const raw = await ask(`${dayAddress(region, date)}/beside?name=${encodeURIComponent(file.name)}`, { ...how, method: "POST", body: file });
  const { mean_tecu: mean, rms_tecu: rms, cells } = raw.hours;
  return {
    said: /** @type {string[]} */ (raw.said), starts: raw.hours.start_utc.map(milliseconds), hours: { mean: numbers(mean), rms: numbers(rms), cells },
    lats: numbers(raw.lats), lons: numbers(raw.lons), difference: /** @type {Float32Array} */ (unpack(raw.difference_m)),
  };
}

/** Ways of working a day can be judged for. @param {string} region @param {string} date @param {How} [how] @returns {Promise<{name: string}[]>} */
export async function uses(region, date, how) {
  return (await ask(`${dayAddress(region, date)}/uses`, how)).uses;
}

/** The outlook at a place, for a use. @param {string} region @param {[number, number]} place @param {string} use  "" the first @param {How} [how] */
export async function outlook(region, [lat, lon], use, how) {
  const raw = await ask(`/api/outlook/${encodeURIComponent(region)}?lat=${lat}&lon=${lon}&use=${encodeURIComponent(use)}`, how);
  return {
    name: raw.name, lat: raw.lat, lon: raw.lon, use: raw.use, knownUntil: raw.known_until, seenDays: raw.seen_days, hours: raw.hours_utc.map(milliseconds),
    delay: numbers(raw.vertical_delay), ranges: Object.fromEntries(Object.entries(raw.ranges).map(([share, { low, high }]) => [share, { low: numbers(low), high: numbers(high) }])),
    slope: numbers(raw.slope["0.95"] ?? []), strained: numbers(raw.chance_strained), broken: numbers(raw.chance_broken), phase: raw.storm_phase,
    windows: raw.windows.map((one) => ({ ...spanOf(one), strained: number(one.chance_strained), broken: number(one.chance_broken) })),
    advice: raw.advice, basis: raw.basis,
  };
}

/**
 * What became of the newest outlooks whose days came. @param {string} region @param {number} newest  so many at most @param {How} [how]
 * @returns {Promise<{outlooks: number, leads: Record<string, any>, states: Record<string, Record<string, any>>}>}
 */
export function outlookRecord(region, newest, how) {
  return ask(`/api/outlook/${encodeURIComponent(region)}/record?newest=${newest}`, how);
}
