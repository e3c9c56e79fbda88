/**
 * Forms for a job of survey and for the service assumed, in the service's own words; what they give is asked as it is.
 * Also the hours behind a verdict, and whether a failure was the ionosphere's. Never keeps a day.
 */

import * as api from "../api.js";
import { fixed, shareText, timeText, JOB_WORDS, SERVICE_WORDS } from "../words.js";
import { make, trouble } from "./parts.js";

/** What is asked where nothing was written. */
export const USUAL_JOB = {
  method: "rtk", baseline_km: "10", horizontal_mm: "30", vertical_mm: "50", hours: "", references: "", places: "", shape: "points",
  session_min: "60", least_min: "15", mask_deg: "15", least_satellites: "5", most_dilution: "6", fixing_chance: "0.1",
};
export const USUAL_SERVICE = { levels: "NPA,APV-I,LPV-200", correction_m: "3", systems: "G", lowest_deg: "5", noise_m: "0.36", usual_grid_m: "3" };

/** @param {string} name @param {string[]} about @param {string} value */
function field(name, [label, kind, unit], value) {
  const input = make("input", { name, value, size: kind === "number" ? 5 : 18, inputmode: kind === "number" ? "decimal" : "text", autocomplete: "off", placeholder: name === "hours" ? JOB_WORDS.hint : undefined });
  return make("label", {}, label, " ", input, unit ? ` ${unit}` : "");
}

function choice(name, label, texts, value) {
  return make("label", {}, label, " ", make("select", { name }, ...Object.entries(texts).map(([key, text]) => make("option", { value: key, text, selected: key === value }))));
}

/** What a form holds, without what is empty. @param {HTMLFormElement} form @returns {Record<string, string>} */
function contents(form) {
  return Object.fromEntries([...new FormData(form).entries()].map(([name, value]) => [name, String(value).trim().replace(/^(-?\d+),(\d+)$/, "$1.$2")]));
}

/**
 * @param {Record<string, string>} job  as it stands
 * @param {(job: Record<string, string>) => void} changed
 * @param {boolean} open  the rarer questions
 */
export function jobForm(job, changed, open) {
  const rows = (fields) => Object.entries(fields).map(([name, about]) => field(name, about, job[name]));
  const rare = make("details", { open }, make("summary", { text: JOB_WORDS.more }), make("div", { class: "job" }, choice("shape", JOB_WORDS.shape, JOB_WORDS.shapes, job.shape), ...rows(JOB_WORDS.rare)));
  const form = /** @type {HTMLFormElement} */ (
    make("form", { class: "job-form", "aria-label": JOB_WORDS.title },
      make("div", { class: "job" }, choice("method", JOB_WORDS.method, JOB_WORDS.methods, job.method), ...rows(JOB_WORDS.fields)),
      rare,
      make("button", { text: JOB_WORDS.ask }))
  );
  form.addEventListener("submit", (event) => {
    event.preventDefault();
    changed({ ...job, ...contents(form) });
  });
  form.addEventListener("change", (event) => {
    if (/** @type {HTMLElement} */ (event.target).matches("select[name=method], input[name=baseline_km]")) changed({ ...job, ...contents(form) });
  });
  return { form, isOpen: () => rare.open };
}

/** @param {Record<string, string>} service @param {(service: Record<string, string>) => void} changed @param {boolean} open */
export function serviceForm(service, changed, open) {
  const form = /** @type {HTMLFormElement} */ (
    make("form", { class: "job-form" }, make("div", { class: "job" }, ...Object.entries(SERVICE_WORDS.fields).map(([name, about]) => field(name, about, service[name]))), make("button", { text: JOB_WORDS.ask }))
  );
  form.addEventListener("submit", (event) => {
    event.preventDefault();
    changed({ ...service, ...contents(form) });
  });
  return make("details", { open }, make("summary", { text: SERVICE_WORDS.title }), form);
}

/**
 * The hours of a job: index, errors, longest baseline, fixing.
 * @param {Awaited<ReturnType<typeof api.survey>>} found
 * @param {{clock: "utc"|"local", zone: string}} how
 */
export function hourTable(found, how) {
  const median = (values) => {
    const known = values.filter(Number.isFinite).sort((a, b) => a - b);
    return known.length ? known[Math.floor(known.length / 2)] : NaN;
  };
  const worst = (values, pick) => {
    const known = values.filter(Number.isFinite);
    return known.length ? pick(...known) : NaN;
  };
  const shown = (value, digits = 0) => (Number.isFinite(value) ? fixed(value, digits) : "–");
  const body = make("tbody");
  found.hours.forEach((ms, i) => {
    const inside = found.times.flatMap((time, at) => (time >= ms && time < ms + 3600000 ? [at] : []));
    const of = (name) => inside.map((at) => found[name][at]);
    const fixing = worst(of("fixing"), Math.max);
    const cells = [shown(found.index[i], 1), found.indexWords[i], shown(worst(of("differential68"), Math.max)), shown(worst(of("differential95"), Math.max)), shown(worst(of("longest"), Math.min), 1), Number.isFinite(fixing) ? shareText(fixing) : "–"];
    body.append(make("tr", {}, make("th", { scope: "row", class: "nowrap", text: timeText(ms, how) }), ...cells.map((text, at) => make("td", { class: at === 1 ? undefined : "number", text }))));
  });
  const least = worst(found.longest, Math.min);
  const when = found.times[found.longest.indexOf(least)];
  // Epochs without a map count as not known.
  const [first, second] = found.times;
  const days = Math.ceil((found.times[found.times.length - 1] - first + (second - first)) / 86400000);
  const part = Math.floor((100 * found.longest.filter(Number.isFinite).length * (second - first)) / (days * 86400000) + 1e-6);
  return [
    make("p", { class: "fine", text: Number.isFinite(least) ? JOB_WORDS.longest(shown(median(found.longest)), shown(least, 1), timeText(when, how), part >= 1 ? String(part) : JOB_WORDS.hardly) : JOB_WORDS.noLongest }),
    make("details", { class: "table-behind" }, make("summary", { text: JOB_WORDS.hours }),
      make("div", { class: "scroll", tabindex: 0, role: "region", "aria-label": JOB_WORDS.hours },
        make("table", {}, make("thead", {}, make("tr", {}, ...JOB_WORDS.heads.map((text, at) => make("th", { scope: "col", text, class: at && at !== 2 ? "number" : undefined })))), body))),
  ];
}

/**
 * Was it the ionosphere? A time of the day, asked and answered in place.
 * @param {string} region @param {string} day @param {Record<string, string>} job @param {number} time  to begin with, ms UTC
 */
export function whyForm(region, day, job, time) {
  const input = make("input", { type: "time", name: "failed", required: true, value: new Date(time).toISOString().slice(11, 16) });
  const answer = make("div", { role: "status" });
  const ask = async () => {
    answer.setAttribute("aria-busy", "true");
    try {
      const found = await api.surveyWhy(region, day, job, `${day}T${input.value}:00Z`);
      answer.replaceChildren(make("p", {}, make("strong", { text: JOB_WORDS.verdicts[found.verdict] ?? found.verdict })), make("ul", {}, ...found.evidence.map((text) => make("li", { text }))));
    } catch (error) {
      answer.replaceChildren(trouble(error, ask));
    }
    answer.setAttribute("aria-busy", "false");
  };
  const form = make("form", { class: "job why-form", submit: (event) => { event.preventDefault(); ask(); } }, make("label", {}, JOB_WORDS.failed, " ", input, " UTC"), make("button", { text: JOB_WORDS.wasIt }));
  return make("div", {}, form, answer);
}
