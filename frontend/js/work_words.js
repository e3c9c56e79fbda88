/**
 * Sentences of the forms for a job, for the service assumed, and for the sites of a region.
 */

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
