/**
 * What is on the screen as files to keep: text tables made here from the numbers already loaded.
 */

import { told } from "./figures/map.js";

/** @param {string|number|null} value  a number is written as it is; text that a spreadsheet would compute is defused */
function cellText(value) {
  if (value === null || (typeof value === "number" && !Number.isFinite(value))) return "";
  if (typeof value === "number") return String(Number(value.toPrecision(6)));
  const text = /^[=+@\-\t]/.test(value) ? `'${value}` : value;
  return /[",\n]/.test(text) ? `"${text.replaceAll('"', '""')}"` : text;
}

/** @param {string[]} heads @param {(string|number|null)[][]} rows */
export function csvText(heads, rows) {
  return `${[heads, ...rows].map((row) => row.map(cellText).join(",")).join("\n")}\n`;
}

/**
 * One map as rows: every cell with all that is told of it. @param {import("./api.js").Window} fields @param {number} index
 * @param {string[]} states @param {number} unseenSigma
 */
export function mapRows(fields, index, states, unseenSigma) {
  const { lats, lons, layers } = fields;
  const size = lats.length * lons.length;
  const time = new Date(fields.times[index]).toISOString();
  return Array.from({ length: size }, (_, k) => {
    const at = index * size + k;
    const values = ["delay", "uncertainty", "slope"].map((layer) => (told(fields, at, layer, unseenSigma) ? layers[layer][at] : null));
    return [time, lats[Math.floor(k / lons.length)], lons[k % lons.length], ...values, states[layers.state[at]]];
  });
}

export const MAP_HEADS = ["time_utc", "lat_deg", "lon_deg", "vertical_delay_m", "vertical_delay_sigma_m", "slope_mm_per_km", "state"];
export const YEAR_HEADS = ["day", "worst_state", "share_broken", "share_strained", "share_unseen", "slope_mm_per_km", "kp_highest", "ap_daily", "flags"];
export const NETWORK_HEADS = ["day", "receiver", "received", "gaps", "slips", "arcs", "level_sigma_tecu", "left_out_rms_tecu", "biases_ns", "said"];
export const SERIES_HEADS = ["time_utc", "vertical_delay_m", "vertical_delay_sigma_m", "slope_mm_per_km", "slope_sigma_mm_per_km", "state"];

/** @param {import("./api.js").Series} series */
export function seriesRows(series) {
  return series.times.map((ms, i) => [new Date(ms).toISOString(), series.delay[i], series.sigma[i], series.slope[i], series.slopeSigma[i], series.state[i]]);
}

/** Hand a text or a file to the reader. @param {string|Blob} what @param {string} name @param {string} [type] */
export function save(what, name, type) {
  const link = document.createElement("a");
  link.href = URL.createObjectURL(typeof what === "string" ? new Blob([what], { type }) : what);
  link.download = name;
  document.body.append(link);
  link.click();
  link.remove();
  setTimeout(() => URL.revokeObjectURL(link.href), 10000);
}

export const OUTLOOK_HEADS = ["hour_start_utc", "vertical_delay_m", "low_95_m", "high_95_m", "low_80_m", "high_80_m", "low_50_m", "high_50_m", "slope_95_mm_per_km", "chance_strained", "chance_broken", "storm_phase"];

/** The hours of an outlook. @param {any} outlook */
export function outlookRows({ hours, delay, ranges, slope, strained, broken, phase }) {
  return hours.map((ms, i) => [new Date(ms).toISOString(), delay[i], ...["95", "80", "50"].flatMap((share) => [ranges[share]?.low[i] ?? null, ranges[share]?.high[i] ?? null]), slope[i] ?? null, strained[i], broken[i], phase[i]]);
}

/**
 * Spans as a calendar (iCalendar, RFC 5545: lines of at most 75 bytes, folded; text escaped; times in UTC).
 * @param {{start: number, end: number, summary: string, about: string}[]} spans @param {number} now  ms UTC
 */
export function calendarText(spans, now) {
  const stamp = (ms) => new Date(Math.round(ms / 60000) * 60000).toISOString().replace(/[-:]|\.\d{3}/g, "");
  const plain = (text) => text.replace(/[\\;,]/g, "\\$&").replace(/\n/g, "\\n");
  const fold = (line) => {
    let [out, size] = ["", 0];
    for (const letter of line) {
      const bytes = new TextEncoder().encode(letter).length;
      if (size + bytes > 73) [out, size] = [`${out}\r\n `, 1];
      out += letter;
      size += bytes;
    }
    return out;
  };
  const events = spans.flatMap(({ start, end, summary, about }, i) => ["BEGIN:VEVENT", `UID:${stamp(start)}-${stamp(now)}-${i}@skylag`, `DTSTAMP:${stamp(now)}`, `DTSTART:${stamp(start)}`, `DTEND:${stamp(end)}`, `SUMMARY:${plain(summary)}`, `DESCRIPTION:${plain(about)}`, "TRANSP:TRANSPARENT", "END:VEVENT"]);
  return `${["BEGIN:VCALENDAR", "VERSION:2.0", "PRODID:-//Skylag//outlook//EN", ...events, "END:VCALENDAR"].map(fold).join("\r\n")}\r\n`;
}
