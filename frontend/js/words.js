/**
 * Every visible sentence of the page, and how numbers, places and times are written.
 * Pure: never touches the document. Times are milliseconds since 1970 in UTC.
 */

/** @typedef {import("./colour.js").StateName} StateName */

export const LAYER_WORDS = {
  delay: { name: "Delay", title: "Vertical delay on 1575.42 MHz", unit: "m" },
  uncertainty: { name: "Uncertainty", title: "Uncertainty of the vertical delay (one sigma)", unit: "m" },
  slope: { name: "Slope", title: "Slope of the vertical delay", unit: "mm/km" },
  state: { name: "State", title: "Do corrections hold?", unit: "" },
};

/** @type {Record<StateName, {name: string, means: string}>} */
export const STATE_WORDS = {
  holds: { name: "holds", means: "corrections hold" },
  strained: { name: "strained", means: "corrections lose accuracy over distance" },
  broken: { name: "broken", means: "corrections must not be relied on" },
  unseen: { name: "unseen", means: "not enough data to say" },
};

/** @type {Record<string, string>} */
export const VERDICT_WORDS = { work: "work", avoid: "avoid", unseen: "unseen, not enough data to say" };

/** Seasons by their months, so that they mean the same in both halves of the world. */
export const SEASON_WORDS = { "dec-feb": "December to February", "mar-may": "March to May", "jun-aug": "June to August", "sep-nov": "September to November" };

/** The magnetic field by the day's highest Kp. @type {Record<string, string>} */
export const FIELD_WORDS = { "": "any", quiet: "quiet, Kp below 4", disturbed: "disturbed, Kp 4", storm: "storm, Kp 5 and more" };

export const KIND_WORDS = {
  slope: { name: "Steep slope", short: "slope" },
  front: { name: "Moving front", short: "front" },
  irregular: { name: "Irregular patch", short: "patch" },
  fault: { name: "Fault in the data", short: "fault" },
};

export const WORDS = {
  simulated: "Simulated data: an invented network, invented days. Nothing here happened.",
  dotted: "Dotted: unseen, not enough data to say; dots over a colour: the delay is known, not whether corrections hold.",
  dotsOver: "over a colour: delay known, not whether corrections hold",
  bareWarning: "by what was seen near by; no number here",
  flags: "Flags",
  show: "Show",
  receivers: "Receivers",
  receiversHeard: "Receivers; empty where no data came",
  sites: "Sites",
  rays: "Pierce points, larger when higher",
  veil: "Fade the delay where it is unsure",
  loadingDay: "Opening the day …",
  lengthUnknown: "the comb points where it goes, its length is not measured",
  loadingMap: "Fetching this hour …",
  loadingReading: "Reading the archive at this place …",
  emptyArchive: "The archive holds no day yet.",
  emptyArchiveHow: "Send your files here, process a day with “skylag day”, or run “skylag demo” for the invented sample days.",
  choosePlace: "Click the map, or choose a site, to ask about a place.",
  noFlags: "No flag was raised on this day.",
  noFlagsNear: "No flag was raised near here within the hour.",
  thisPlace: "Chosen place",
  noSites: "No sites are named for this region.",
  offline: "The page cannot reach the service on this machine. Is it still running?",
  strangeAnswer: "The service gave an answer this page does not understand",
  tryAgain: "Try again",
  notConfirmed: "Not confirmed.",
  allHold: "Corrections hold at every site.",
  allHeld: "At that time corrections held at every site; how it is now is not known.",
  /** @param {string[]} names */
  also: (names) =>
    names.length < 4 ? `Not good either: ${names.join(", ")}.` : `Not good either: ${names.slice(0, 2).join(", ")} and ${names.length - 2} more sites.`,
  /** @param {number} minutes */
  stripHelp: (minutes) => `Drag, or arrow keys: ${minutes} minutes a step, with shift an hour; Home, End.`,
  /** @param {string} state */
  siteIs: (state) => (state === "unseen" ? "Unseen here: not enough data near this site to say. Treat it as not covered." : `Corrections are ${state} here, by what was seen near this site.`),
  /** @param {string} sentence */
  mapAlone: (sentence) => `The map’s own cell alone would say: ${sentence}`,
  sigma: "± is one standard deviation.",
  wholeRegion: "The whole region",
  allDays: "All stored days",
  noOther: "No other day",
  quietDays: "Median of the quiet days around",
  slopeTo: "slope, to",
  notAmongThese: "not among the days shown",
  noSuchDay: "No stored day is like that; choose another span or state.",
  yearCaption: "Shares are of all cells and times, or of the site’s time; the slope is what 99 of 100 seen cells stay under.",
  noActivity: "No indices of geomagnetic activity of these days are in the archive, so it cannot filter them.",
  /** @param {string} kp */
  kp: (kp) => `Kp up to ${kp}`,
  /** @param {string} share */
  partUnseen: (share) => `${share} of it unseen`,
  /** @param {string} slope */
  slopeUpTo: (slope) => `slope up to ${slope} mm/km`,
  /** @param {number} shown @param {number} all */
  yearSpan: (shown, all) => `${all === 1 && shown === all ? "One stored day" : `${shown === all ? "All" : `${shown} of`} ${all} stored ${all === 1 ? "day" : "days"}`}. State: the worst that was seen at any time, dotted as far as nothing was; bars: the slope that 99 of 100 seen cells stay under.`,
  /** @param {string} what @param {boolean} difference */
  comparedWith: (what, difference) => (difference ? `This day less ${what}, at the same time of day.` : `Right: ${what}, at the same time of day.`),
  /** @param {number} count */
  quietMedian: (count) => `the median of ${count} quiet ${count === 1 ? "day" : "days"}`,
  noQuiet: "No quiet day within twenty days is stored: there is nothing to compare with.",
  otherGrid: "That day’s maps stand on another grid: they cannot be compared cell by cell.",
  otherMissing: "That day has no map for this time of day.",
  noDifferenceOfStates: "States have no difference: both days stand side by side.",
  lessThat: "less",
  oneLessOther: "this day less the other",
  /** @param {string} at @param {string} ago */
  fresh: (at, ago) => `Newest data: ${at}, ${ago}.`,
  /** @param {string} at @param {string} ago */
  stale: (at, ago) => `Newest data: ${at}, ${ago}: not the present.`,
  /** @param {string} at */
  aheadOfClock: (at) => `Newest data: ${at}, later than this machine’s clock: not the present.`,
  /** @param {number} minutes */
  lookingBack: (minutes) => `You look at ${minutes < 120 ? `${minutes} minutes` : `${Math.round(minutes / 60)} hours`} before that.`,
  noFlagsNow: "No flag is raised at this time.",
  noFront: "No front has been seen on this day until now.",
  loadingArrivals: "Asking when fronts arrive …",
  /** @param {number} hours */
  noArrivals: (hours) => `No front is known to be on its way to a named site within ${hours} hours.`,
  /** @param {number} minutes @param {number} spread  two sigmas */
  inMinutes: (minutes, spread) => `in ${minutes} minutes, give or take ${spread}`,
  /** @param {string} from @param {string} speed */
  frontFrom: (from, speed) => `a front from the ${from} at ${speed} m/s`,
  /** @param {string} fronts */
  ifItKeeps: (fronts) => `By ${fronts}, if course, speed and strength stay; “give or take” is two standard deviations; how long a front is was not measured.`,
  loadingAlerts: "Asking for alerts …",
  noAlerts: "No alert was raised. Rules for alerts are given to “skylag watch”.",
  /** @param {number} count */
  olderAlerts: (count) => `and ${count} earlier.`,
  simulatedShort: "(simulated data)",
  working: "Working it out …",
  /** @param {string} site */
  surveyAt: (site) => `Survey at ${site}`,
  /** @param {string} site */
  approachesAt: (site) => `Approaches at ${site}`,
  assumptions: "Assumptions",
  methods: { rtk: "RTK from an own base", static: "static", network: "network corrections", dgnss: "DGNSS, one frequency" },
  method: "Method",
  noWindows: "No window could be told for this day.",
  noOutages: "No outage on this day.",
  /** @param {string} share */
  ofTheDay: (share) => `${share} of the day`,
  /** @param {number} count */
  more: (count) => `and ${count} more: see the sheet.`,
  noOutlook: "No outlook can be given yet.",
  /** @param {string} place @param {string} use @param {string} until @param {number} seen */
  outlookFor: (place, use, until, seen) => `At ${place}, for ${use}; known until ${until}, this place seen on ${countText(seen, "day")}.`,
  /** @param {number} strained @param {number} broken  shares; not finite where not known */
  chances: (strained, broken) => (Number.isFinite(strained) && Number.isFinite(broken) ? `chance of strained ${shareText(strained)}, of broken ${shareText(broken)}` : "chances not known"),
  chanceUnknown: "not known",
  /** @param {string} end @param {string} kind */
  firstSpan: (end, kind) => `Until ${end}: ${kind}.`,
  chancesAbout: "Chances hour by hour of being at least strained, and of being broken",
  hourByHour: "Hour by hour",
  basis: "What this rests on",
  loadingNetwork: "Asking what each receiver gave …",
  /** @param {number} count */
  moreNotes: (count) => `${countText(count, "more note")} on this day`,
  noNetworkDay: "Of this day nothing is kept about the receivers.",
  disagrees: "disagrees with the others",
  /** @param {string[]} names @param {number} all @param {boolean} checked */
  disagree: (names, all, checked) =>
    names.length
      ? `${names.join(", ")} ${names.length === 1 ? "stands" : "stand"} out of ${all} receivers; see below why.`
      : `None of ${all} receivers stands out${checked ? "" : "; how well the others foretell each was not kept for this day"}.`,
  /** @param {number} count */
  networkCaption: (count) =>
    `${count > 1 ? `Small bars and points: the last ${count} stored days, the chosen one in ink. ` : ""}Left out: how far the field of all the others misses this receiver’s lines of sight. A dash: not kept.`,
  /** @param {number} count */
  overDays: (count) => `over ${count} days`,
  noCurves: "No line of sight passed near this place within three quarters of an hour.",
  curvesAbout: "Vertical delay along single lines of sight that pass within 250 km, 45 minutes to either side; most changed satellites first. A true wall passes one receiver after the other; a fault shows on one line only.",
  curvesTable: "Lines of sight as a table",
  curvesFile: "these lines of sight, CSV",
  /** @param {string} satellite @param {string} lines */
  curvesOf: (satellite, lines) => `Vertical delay along lines of sight to ${satellite}; change within the span: ${lines}.`,
  /** @param {string} what */
  dashedIs: (what) => `Dashed: ${what}.`,
  verticalDelay: "Vertical delay",
  verticalDelayM: "vertical delay, m",
  asTable: "As a table",
  /** @param {string} date @param {string} time @param {string} address */
  printed: (date, time, address) => `Printed ${date}, ${time}. This view: ${address}`,
  noPlotly: "plotly.js did not load from this server",
  /** @param {number} count @param {string} from @param {string} to */
  curvesCaption: (count, from, to) => `${countText(count, "line")} of sight, ${from} – ${to}`,
  /** @param {string} speed @param {string} wind */
  movesTo: (speed, wind) => `${speed} m/s to the ${wind}`,
  /** @param {string} ago */
  written: (ago) => `Results written ${ago}.`,
  /** @param {string} place @param {string} delay @param {string} time */
  seriesAbout: (place, delay, time) => `Vertical delay at ${place} over the day; ${delay} at ${time}.`,
  /** @param {string} region */
  mapOf: (region) => `Map of ${region}.`,
  files: { sheet: "sheet", pdf: "sheet, PDF", calendar: "calendar" },
  takeAway: "Take away:",
  print: "print",
  play: "Play",
  pause: "Pause",
  mapCaption: (what, when) => `${what}, ${when}. Rows: latitude; columns: longitude; “unseen” where not enough data say anything, * where the delay is known but not whether corrections hold.`,
};

/** The day ahead and its record. */
export const AHEAD_WORDS = {
  for: "For",
  hoursCsv: "hours, CSV",
  windowsIcs: "windows, calendar",
  heads: ["Hour", "Vertical delay", "95 in 100 within", "Slope, 95 of 100 under", "Strained", "Broken", "Storm phase"],
  chartKey: "Above: the expected vertical delay with the ranges that hold 50, 80 and 95 of 100 outcomes. Below: the chance of being at least strained, and of being broken; dotted where it is not known.",
  /** @param {string} from @param {string} to */
  chartAbout: (from, to) => `Expected vertical delay hour by hour from ${from} to ${to}, with its ranges.`,
  record: "How outlooks turned out",
  noRecord: "No outlook’s day has come yet. Each is kept when it is made, and scored when its day is in the archive.",
  /** @param {string} own @param {string} others @param {string} inside */
  lastOne: (own, others, inside) => `The last outlook whose day came was off by ${own} m (root mean square)${others ? `; beside it ${others}` : ""}. Its 95 % range held ${inside} of the hours.`,
  beside: { persistence: "the day before again", recurrence: "27 days before again", climatology: "climatology", usual: "the usual of late" },
  /** @param {string} outlooks */
  over: (outlooks) => `All together, ${outlooks}, over all places of the map; delay errors as root mean squares.`,
  leads: { 1: "The day ahead", 2: "The day after" },
  off: "Off by",
  cases: "Hours and places",
  own: "The outlook",
  crps: "Its ranked probability score",
  /** @param {string} share */
  inside: (share) => `Its ${share} % range held`,
  /** @param {string} level @param {string} use */
  reliability: (level, use) => `Chances of ${level}, told and come, for ${use}`,
  /** @param {string} own @param {string} often @param {string} same */
  brier: (own, often, same) => `Brier score ${own}; telling the usual frequency ${often}, the day before again ${same}. Smaller is better.`,
  tenths: ["Cases", "Chance told", "Came true"],
};

/** Heads of the tables. */
export const HEADS = {
  strip: ["Site", "Span", "Corrections", "Reason"],
  curves: ["Line", "First", "Last", "Change", "Elevation"],
  flags: ["Time", "Kind", "Corrections", "Slope", "Moves", "Place", "Evidence"],
  network: ["Receiver", "Data received", "Gaps", "Slips", "Arcs", "Level, one sigma", "Left out, off by", "Biases", "Said of it"],
  networkDays: ["Receiver", "Day", "Data received", "Gaps", "Slips", "Left out, off by", "Biases"],
  year: ["Day", "Worst state", "Broken", "Strained", "Unseen", "Slope", "Highest Kp", "ap", "Flags"],
  series: ["Time", "Slope"],
};

/** The reading of the chosen place. */
export const READING_WORDS = {
  /** @param {string} [kind] */
  goTo: (kind = "flag") => `Go to this ${kind}`,
  why: "Why",
  degrees: "Write degrees, like 40.25 S and 146.5 E, or −40.25 and 146.5.",
  /** @param {string} south @param {string} north @param {string} west @param {string} east */
  outside: (south, north, west, east) => `That is outside the region: ${south} to ${north}, ${west} to ${east}.`,
  corrections: "Corrections here",
  /** @param {string} content */
  content: (content) => `${content} of electron content`,
  /** @param {string} wind */
  toward: (wind) => `growing toward the ${wind}`,
  carriedBy: "Carried by",
  /** @param {number} count */
  lines: (count) => countText(count, "line of sight", "lines of sight"),
  notKnown: "not known",
  /** @param {number} km */
  away: (km) => `, ${km} km away`,
};

/** The page's own frame: index.html names these keys in data-say (text), data-label (aria-label), data-role (aria-roledescription). @type {Record<string, string>} */
export const PAGE_WORDS = {
  questions: "Questions",
  day: "Day",
  dayBefore: "Day before",
  dayAfter: "Day after",
  aboutTheseData: "About these data",
  ageOfTheData: "Age of the data",
  receiversAsATable: "Receivers as a table",
  allTheseDays: "All these days as a table",
  map: "Map",
  mapOfTheOther: "Map of the other day",
  legend: "Legend",
  sites: "Sites",
  timeOfDay: "Time of day",
  theMapAsA: "The map as a table",
  statesOfTheSites: "States of the sites as a table",
  storedDays: "Stored days",
  theStoredDaysAs: "The stored days as a table",
  delayOverTheDay: "Delay over the day",
  delayAsATable: "Delay over the day as a table",
  tableOfTheFlags: "Table of the flags",
  mapRole: "map",
  skipToTheDay: "Skip to the day strip",
  skipToTheReading: "Skip to the reading",
  ahead: "Ahead",
  canWeWorkTomorrow: "can we work tomorrow?",
  now: "Now",
  whatFailsAtThis: "what fails at this moment?",
  past: "Past",
  whatHappenedThatDay: "what happened that day?",
  network: "Network",
  whoGaveWhat: "who gave what?",
  timesIn: "Times in",
  utc: "UTC",
  local: "Local",
  yourFiles: "Your files",
  night: "Night",
  backToTheNewest: "Back to the newest",
  doesNotHold: "Does not hold",
  flagsNow: "Flags now",
  predictedToArrive: "Predicted to arrive",
  alerts: "Alerts",
  theDayAhead: "The day ahead",
  theReceivers: "The receivers",
  takeAway: "Take away:",
  receiversCsv: "receivers, CSV",
  print: "print",
  verticalDelay: "Vertical delay",
  compareWith: "Compare with",
  howToCompare: "How to compare",
  sideBySide: "Side by side",
  difference: "Difference",
  layerOfTheMap: "Layer of the map",
  delay: "Delay",
  uncertainty: "Uncertainty",
  slope: "Slope",
  state: "State",
  arrowKeysMoveThe: "Arrow keys move the chosen place by one cell of the grid. The reading beside the map tells what holds there.",
  theDay: "The day",
  dragOrUseThe: "Drag, or use the arrow keys: 5 minutes a step, with shift an hour, Home and End for the ends.",
  play: "Play",
  mapsASecond: "maps a second",
  time: "Time",
  mapAsATable: "Map as a table",
  theDayAsA: "The day as a table",
  theDays: "The days",
  of: "of",
  in: "in",
  thatWere: "that were",
  goodOrBad: "good or bad",
  strainedOrBroken: "strained or broken",
  broken: "broken",
  magneticField: "magnetic field",
  theseDaysCsv: "these days, CSV",
  asATable: "As a table",
  readingOfTheChosen: "Reading of the chosen place",
  place: "Place",
  chosenOnTheMap: "Chosen on the map",
  latitude: "Latitude",
  longitude: "Longitude",
  read: "Read",
  openingTheDay: "Opening the day …",
  forYourWorkHere: "For your work here",
  sitesOfTheRegion: "Sites of the region",
  curvesOfTheLines: "Curves of the lines of sight near here",
  publishedMapBeside: "A published map beside this day",
  planningAidNotFor: "Planning aid, not for navigation: official notices, the service provider, the receiver maker and local rules decide.",
  thisPlaceThroughThe: "This place through the day",
  flagsOfTheDay: "Flags of the day",
  flagsCsv: "flags, CSV",
  flagsGeojson: "flags, GeoJSON",
  mapPng: "map, PNG",
  mapSvg: "map, SVG",
  mapCsv: "map, CSV",
  thisPlaceCsv: "this place, CSV",
  mapLines: "lines of equal delay, GeoJSON",
  dayNetcdf: "day, NetCDF",
  dayIonex: "day, IONEX",
};

/** Sending files, and the work that is made of them. */
export const FILE_WORDS = {
  title: "Your files",
  close: "Close",
  about: "RINEX observations of any number of receivers, and at least one navigation or SP3 file of the day; bias files if there are any. Plain or compressed; kinds are told by content. They stay on this server.",
  choose: "Choose files",
  orDrop: "or drop files or folders anywhere on the page.",
  region: "for the region",
  drawn: "drawn around the receivers",
  begin: "Compute these days",
  work: "Work",
  noWork: "Nothing was computed from files yet.",
  waiting: "waits",
  looking: "being looked at …",
  sendAgain: "Send again",
  empty: "the file is empty",
  /** @param {string} most */
  tooLarge: (most) => `larger than the ${most} that this server takes`,
  /** @param {string} share */
  sending: (share) => `sending, ${share}`,
  /** @param {string} what */
  progressOf: (what) => `Progress of ${what}`,
  kinds: { observations: "observations", navigation: "navigation data", orbits: "orbits", biases: "biases", ionex: "a map", indices: "indices of activity" },
  /** What a file is. @param {{kind: string, marker: string, day: string}} told  marker and day where observations tell them */
  holds: ({ kind, marker, day }) => [`${FILE_WORDS.kinds[kind] ?? kind}${marker ? ` of ${marker}` : ""}`, day && dayText(day)].filter(Boolean).join(", "),
  /** @param {number} sent @param {number} refused @param {number} all */
  soFar: (sent, refused, all) => `${sent} of ${countText(all, "file")} sent${refused ? `, ${refused} refused` : ""}.`,
  leftOut: "Left out",
  /** @param {string} file @param {number} line @param {string} reason */
  because: (file, line, reason) => `${file}${line ? `, line ${line}` : ""}: ${reason}`,
  /** @param {string} days */
  queued: (days) => `${days} queued; the work is told below.`,
  inQueue: "waits for its turn; “skylag work” or “skylag serve --work” computes what waits",
  /** @param {number} seconds */
  nextTry: (seconds) => `failed once; tried again in ${seconds < 90 ? countText(Math.max(1, Math.round(seconds)), "second") : countText(Math.round(seconds / 60), "minute")}`,
  /** @param {string} stage @param {string} word */
  stage: (stage, word) => [stage || "starting", word].filter(Boolean).join(": "),
  done: "done",
  failed: "failed",
  cancelled: "cancelled",
  cancel: "Cancel",
  /** @param {string} day */
  open: (day) => `Open ${dayText(day)}`,
  drop: "Drop to send these files",
  key: "Key of this server",
  useKey: "Use this key",
};

const MINUS = "\u2212";

/**
 * A number with a fixed count of decimals and a true minus sign.
 * @param {number} value
 * @param {number} decimals
 */
export function fixed(value, decimals) {
  if (!Number.isFinite(value)) return "–";
  const text = Math.abs(value).toFixed(decimals);
  return value < 0 && Number(text) !== 0 ? MINUS + text : text;
}

/**
 * Decimals that suit an uncertainty: two figures below 2 of its leading place, else one.
 * @param {number} sigma
 */
export function decimalsFor(sigma) {
  if (!(sigma > 0) || !Number.isFinite(sigma)) return 1;
  const power = Math.floor(Math.log10(sigma));
  const leading = sigma / 10 ** power;
  return Math.min(6, Math.max(0, (leading < 1.95 ? 1 : 0) - power));
}

/**
 * "38 ± 6 mm/km": a value, its sigma, its unit. Without a sigma the words say so.
 * @param {number} value
 * @param {number} sigma
 * @param {string} unit
 * @param {number} [most]  the most decimals worth showing
 */
export function withSigma(value, sigma, unit, most = 2) {
  if (!Number.isFinite(value)) return "not known";
  if (!Number.isFinite(sigma)) return `${fixed(value, Math.min(most, 1))} ${unit}, uncertainty not known`.trim();
  const decimals = Math.min(most, decimalsFor(sigma));
  return `${fixed(value, decimals)} ± ${fixed(sigma, decimals)} ${unit}`.trim();
}

/** @param {number} lat */
export function latText(lat, decimals = 2) {
  const text = Math.abs(lat).toFixed(decimals);
  return Number(text) === 0 ? `${text}°` : `${text}° ${lat < 0 ? "S" : "N"}`;
}

/** @param {number} lon */
export function lonText(lon, decimals = 2) {
  const l = ((((lon + 180) % 360) + 360) % 360) - 180;
  const text = Math.abs(l).toFixed(decimals);
  return Number(text) === 0 || Number(text) === 180 ? `${text}°` : `${text}° ${l < 0 ? "W" : "E"}`;
}

/** @param {number} lat @param {number} lon */
export function placeText(lat, lon, decimals = 2) {
  return `${latText(lat, decimals)}, ${lonText(lon, decimals)}`;
}

const WINDS = ["north", "north-east", "east", "south-east", "south", "south-west", "west", "north-west"];

/** @param {number} heading  degrees from north through east, toward */
export function compass(heading) {
  return WINDS[Math.round((((heading % 360) + 360) % 360) / 45) % 8];
}

/** @param {string} zone  IANA name */
export function zoneName(zone) {
  if (!zone || zone === "UTC" || zone === "Etc/UTC") return "UTC";
  // In these names the sign counts westward: Etc/GMT-10 is ten hours ahead of UTC.
  const fixedZone = /^Etc\/GMT([+-])(\d+)$/.exec(zone);
  if (fixedZone) return `UTC${fixedZone[1] === "-" ? "+" : MINUS}${fixedZone[2]}`;
  return `${zone.split("/").pop()?.replaceAll("_", " ")} time`;
}

/** @type {Map<string, Intl.DateTimeFormat>} */
const formats = new Map();

/** @param {string} zone @param {Intl.DateTimeFormatOptions} options */
function format(zone, options) {
  const key = zone + JSON.stringify(options);
  let found = formats.get(key);
  if (!found) {
    try {
      found = new Intl.DateTimeFormat("en-GB", { timeZone: zone, hourCycle: "h23", ...options });
    } catch {
      found = new Intl.DateTimeFormat("en-GB", { timeZone: "UTC", hourCycle: "h23", ...options });
    }
    formats.set(key, found);
  }
  return found;
}

/** Epochs on GPS time lie a few leap seconds beside the whole minute of UTC: written to the nearest minute. */
const nearestMinute = (ms) => Math.round(ms / 60000) * 60000;

/** @param {number} ms @param {string} [zone] "14:35" */
export function hourText(ms, zone = "UTC") {
  return format(zone, { hour: "2-digit", minute: "2-digit" }).format(nearestMinute(ms));
}

/** @param {number} ms @param {string} [zone] "14 March 2031" */
export function dateText(ms, zone = "UTC") {
  return format(zone, { day: "numeric", month: "long", year: "numeric" }).format(nearestMinute(ms));
}

/** @param {string} day YYYY-MM-DD */
export function dayText(day) {
  const ms = Date.parse(`${day}T00:00:00Z`);
  return format("UTC", { weekday: "short", day: "numeric", month: "long", year: "numeric" }).format(ms);
}

/** "May 2031". @param {string} month  YYYY-MM */
export function monthText(month) {
  return format("UTC", { month: "short", year: "numeric" }).format(Date.parse(`${month}-01T00:00:00Z`));
}

/** A share as per cent; what is more than nothing is never written as nothing. @param {number|undefined} share */
export function shareText(share) {
  if (share === undefined || !Number.isFinite(share)) return "–";
  if (share > 0 && share < 0.001) return "< 0.1 %";
  return `${(100 * share).toFixed(share < 0.1 || (share > 0.995 && share < 1) ? 1 : 0)} %`;
}

/**
 * "14:35 UTC" or "01:35 Hobart time".
 * @param {number} ms
 * @param {{clock?: "utc"|"local", zone?: string}} [how]
 */
export function timeText(ms, { clock = "utc", zone = "UTC" } = {}) {
  return clock === "local" && zone !== "UTC" ? `${hourText(ms, zone)} ${zoneName(zone)}` : `${hourText(ms)} UTC`;
}

/**
 * A span within a day, its clock named once: "05:20 – 08:15 UTC"; the end of the day is 24:00.
 * @param {number} start
 * @param {number} end
 * @param {{clock?: "utc"|"local", zone?: string}} [how]
 */
export function spanText(start, end, { clock = "utc", zone = "UTC" } = {}) {
  const local = clock === "local" && zone !== "UTC";
  const [from, to] = [start, end].map((ms) => hourText(ms, local ? zone : "UTC"));
  const name = local ? zoneName(zone) : "UTC";
  if (end - start < 60000) return `${from} ${name}`;
  return `${from} – ${to === "00:00" ? "24:00" : to} ${name}`;
}

/**
 * Both clocks, the chosen one first: "14:35 UTC · 01:35 Hobart time, 15 March 2031".
 * @param {number} ms
 * @param {string} zone
 * @param {"utc"|"local"} [first]
 */
export function bothClocks(ms, zone, first = "utc") {
  const utc = `${hourText(ms)} UTC`;
  if (!zone || zone === "UTC") return utc;
  const sameDay = dateText(ms) === dateText(ms, zone);
  const local = `${hourText(ms, zone)} ${zoneName(zone)}${sameDay ? "" : `, ${dateText(ms, zone)}`}`;
  return first === "local" ? `${local} · ${utc}` : `${utc} · ${local}`;
}

/**
 * What decides a state, in one sentence.
 * @param {Record<string, number>} limits
 */
export function limitsSentence({ strained_mm_per_km: strained, broken_mm_per_km: broken, unseen_sigma_m: unseen }) {
  return `The limits here: strained from ${strained} mm/km, broken from ${broken} mm/km, unseen where the delay is not known to ${unseen} m, or where it cannot be said (95 %) that the slope stays under ${strained} mm/km.`;
}

/**
 * What "holds" asks for, and what it does not: a job may ask for more.
 * @param {Record<string, number>} limits
 */
export function holdsSentence({ strained_mm_per_km: strained }) {
  return `Corrections hold where the slope stays under ${strained} mm/km (95 %), whatever the distance to the base. Whether that is enough for your baseline and tolerances, or for an approach, is told under “${PAGE_WORDS.forYourWorkHere}”.`;
}

/**
 * How long ago, in words.
 * @param {number} ms
 */
export function agoText(ms) {
  const minutes = Math.round(ms / 60000);
  if (minutes < 2) return "a moment ago";
  if (minutes < 90) return `${minutes} minutes ago`;
  const hours = Math.round(minutes / 60);
  if (hours < 36) return `${hours} hours ago`;
  return `${Math.round(hours / 24)} days ago`;
}

/**
 * One line for a flag: what it is, where it goes, how steep.
 * @param {import("./api.js").Flag} flag
 */
export function flagSentence(flag) {
  const parts = [KIND_WORDS[flag.kind]?.name ?? flag.kind];
  if (Number.isFinite(flag.slope)) parts.push(withSigma(flag.slope, flag.sigma, "mm/km"));
  if (Number.isFinite(flag.speed) && Number.isFinite(flag.heading)) {
    parts.push(`moving ${compass(flag.heading)} at ${fixed(flag.speed, 0)} m/s`);
  }
  return parts.join(", ");
}

/**
 * What the strip says of a site at a time.
 * @param {string} site
 * @param {StateName} state
 * @param {string} reason
 */
export function siteSentence(site, state, reason) {
  const plain = `${site}: ${STATE_WORDS[state].name}`;
  if (!reason) return state === "holds" ? `${plain}.` : `${plain}, ${STATE_WORDS[state].means}.`;
  const rest = reason.startsWith(`${state}: `) ? reason.slice(state.length + 2) : reason;
  return `${plain}, ${rest.replace(/[.\s]+$/, "")}.`;
}

/** A sentence out of a reason that began in the middle of one. @param {string} reason */
export function asSentence(reason) {
  const text = reason.trim().replace(/[.\s]+$/, "");
  return text ? `${text[0].toUpperCase()}${text.slice(1)}.` : "";
}

/** Who saw a flag; one that stands alone says so first. @param {{evidence: string, confirmed: boolean}} flag */
export function evidenceText({ evidence, confirmed }) {
  const said = asSentence(evidence);
  return confirmed || /^unconfirmed|^not confirmed/i.test(said) ? said : `${WORDS.notConfirmed} ${said}`;
}

/** @param {string} text @param {number} most  characters */
export function shortened(text, most) {
  return text.length > most ? `${text.slice(0, most - 1).trimEnd()}…` : text;
}

/** @param {number} bytes */
export function bytesText(bytes) {
  if (bytes < 1000) return countText(bytes, "byte");
  return bytes < 1e6 ? `${fixed(bytes / 1e3, bytes < 1e4 ? 1 : 0)} kB` : `${fixed(bytes / 1e6, bytes < 1e7 ? 1 : 0)} MB`;
}

/** @param {number} count @param {string} one @param {string} [many] */
export function countText(count, one, many = `${one}s`) {
  return `${count} ${count === 1 ? one : many}`;
}

// The forms for a job, for the service assumed, and for the sites of a region.

export const JOB_WORDS = {
  title: "The job",
  more: "More about the job",
  method: "Method",
  methods: { rtk: "RTK from an own base", static: "static", network: "network corrections", dgnss: "DGNSS, one frequency" },
  ask: "Ask again",
  /** name in the service's words -> label, kind of control, unit */
  fields: {
    baseline_km: ["Baseline", "number", "km"],
    horizontal_mm: ["Tolerance across", "number", "mm"],
    vertical_mm: ["Tolerance in height", "number", "mm"],
    hours: ["Working hours, local", "text", ""],
  },
  rare: {
    references: ["Reference stations in use, names or lat,lon with ; between", "text", ""],
    places: ["Other places than this, lat,lon with ; between", "text", ""],
    session_min: ["Session", "number", "min"],
    least_min: ["Shortest useful window", "number", "min"],
    mask_deg: ["Lowest elevation", "number", "°"],
    least_satellites: ["Satellites needed", "number", ""],
    most_dilution: ["Dilution of position at most", "number", ""],
    fixing_chance: ["Chance that fixing suffers at most", "number", ""],
  },
  shape: "The places are",
  shapes: { points: "places apart", route: "a route", area: "corners of an area" },
  hint: "07:00-16:30",
  /** @param {string} middle @param {string} least @param {string} when @param {string} part  of the day, % */
  longest: (middle, least, when, part) => `Longest baseline within tolerance, of the ${part} % of the day that is known: ${middle} km in the middle of the values, ${least} km at ${when}.`,
  hardly: "less than 1",
  noLongest: "Longest baseline within tolerance: not known at any time of the day.",
  hours: "Hour by hour",
  heads: ["Hour", "Index, ppm", "That is", "Error 68 %, mm", "Error 95 %, mm", "Longest baseline, km", "Fixing suffers"],
  failed: "Fixing failed at",
  wasIt: "Was it the ionosphere?",
  verdicts: { likely: "Likely.", possible: "Possibly.", unlikely: "Unlikely.", "cannot be told": "It cannot be told." },
};

export const SERVICE_WORDS = {
  title: "What the service is assumed to send",
  fields: {
    levels: ["Service levels, with commas", "text", ""],
    correction_m: ["Bound of clock and orbit", "number", "m"],
    systems: ["Systems augmented", "text", ""],
    lowest_deg: ["Lowest elevation of the aircraft", "number", "°"],
    noise_m: ["Noise of its receiver", "number", "m"],
    usual_grid_m: ["Grid confidence of a usual day", "number", "m"],
  },
};

export const SITE_WORDS = {
  name: "Name",
  lat: "Latitude",
  lon: "Longitude",
  kind: "Kind",
  kinds: ["aerodrome", "survey", "port", "site"],
  add: "Add a site",
  change: (name) => `Change ${name}`,
  save: "Save",
  leave: "Leave it",
  edit: "Change",
  remove: "Take away",
  editOf: (name) => `Change ${name}`,
  removeOf: (name) => `Take away ${name}`,
  sure: (name) => `Take ${name} away? What days kept of it stays.`,
  list: "Take in a list: CSV with name, lat, lon, kind, or GeoJSON",
  leftOut: (count) => `${count} of the list could not be taken:`,
  line: (number, what) => (number ? `line ${number}: ${what}` : what),
  changed: "Changed lately",
  nobody: "This server takes no changes; sites come from its region file.",
  degrees: "Write degrees, like 40.25 S and 146.5 E, or −40.25 and 146.5.",
  here: "Take the chosen place",
  about: "Sites as a table",
  none: "No site yet.",
  offMap: "outside the map",
};

/** @param {number} minutes */
const span = (minutes) => (minutes >= 90 ? `${(minutes / 60).toFixed(1)} h` : `${Math.round(minutes)} min`);

export const GROUND_WORDS = {
  day: (m) => `Ground-based augmentation: slope within nominal for ${span(m.within)}, beyond nominal for ${span(m.nominal)}, beyond what can be announced for ${span(m.announced)}, beyond the threat space for ${span(m.threat)}, under a warning beside that for ${span(m.warned)}, not known for ${span(m.unseen)}.`,
  next: (words) => `Next from this time on: ${words}.`,
};
