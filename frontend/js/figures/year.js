/**
 * The days of a span as a strip: one column per stored day, its worst state and its largest slope. Pure.
 */

import { roundEnd } from "../colour.js";

const DAY = 86400000;
/** Seasons by their months, 0 = January. */
export const SEASONS = { "dec-feb": [11, 0, 1], "mar-may": [2, 3, 4], "jun-aug": [5, 6, 7], "sep-nov": [8, 9, 10] };

/**
 * The worst that a day saw: broken or strained at any time and place; else unseen where that was more than half of it.
 * @param {Record<string, number>|undefined} shares  state -> share of the day
 * @returns {import("../colour.js").StateName}
 */
export function worstOf(shares) {
  if (!shares) return "unseen";
  if (shares.broken > 0) return "broken";
  if (shares.strained > 0) return "strained";
  return shares.unseen > 0.5 || !(shares.holds > 0) ? "unseen" : "holds";
}

/** The share of a day that nobody saw. @param {Record<string, number>|undefined} shares */
export function unseenOf(shares) {
  return shares ? shares.unseen ?? 0 : 1;
}

/** @param {import("../api.js").DayEntry} entry @param {string} who  a site, or "" for the region */
export function sharesOf(entry, who) {
  return who ? entry.siteShares[who] : entry.shares;
}

/**
 * How the magnetic field was, by the highest Kp of the day: from 5 a storm, from 4 disturbed; "" where no Kp is known.
 * Source: NOAA space weather scales, where Kp 5 is the least storm (G1) and 4 is called active.
 * @param {number} kp
 */
export function fieldOf(kp) {
  return !Number.isFinite(kp) ? "" : kp >= 4.67 ? "storm" : kp >= 3.67 ? "disturbed" : "quiet";
}

/**
 * The stored days that a wish leaves, oldest first.
 * @param {import("../api.js").DayEntry[]} entries  of one region
 * @param {{span: string, worst: string, field: string}} wish  span: "", a year or a key of SEASONS; worst: "" or a state at
 *   least; field: "" or what fieldOf gives
 * @param {string} who
 */
export function chosenDays(entries, { span, worst, field }, who) {
  const least = { "": 0, strained: 1, broken: 2 }[worst] ?? 0;
  const rank = { unseen: 0, holds: 0, strained: 1, broken: 2 };
  return entries
    .filter(({ day }) => !span || (SEASONS[span] ? SEASONS[span].includes(Number(day.slice(5, 7)) - 1) : day.startsWith(span)))
    .filter((entry) => !field || fieldOf(entry.kp) === field)
    .filter((entry) => rank[worstOf(sharesOf(entry, who))] >= least)
    .sort((a, b) => (a.day < b.day ? -1 : 1));
}

/**
 * @param {object} contents
 * @param {import("../api.js").DayEntry[]} contents.entries  chosen days, oldest first
 * @param {string} contents.who
 * @param {number} contents.width  pixels
 * @param {number} [contents.slopeHeight]
 * @param {number} [contents.stateHeight]
 */
export function yearFigure({ entries, who, width, slopeHeight = 44, stateHeight = 22 }) {
  const numberOf = (day) => Math.round(Date.parse(`${day}T00:00:00Z`) / DAY);
  const numbers = entries.map(({ day }) => numberOf(day));
  // Long gaps, as between the same seasons of two years, shrink to a week: days without data take little room.
  /** @type {number[]} */ const at = [];
  numbers.forEach((n, i) => at.push(i ? at[i - 1] + Math.min(n - numbers[i - 1], 8) : 0));
  const count = entries.length ? at[at.length - 1] + 1 : 1;
  const step = Math.min(36, width / count);
  const top = roundEnd(Math.max(1, ...entries.map((entry) => entry.slope).filter(Number.isFinite)));
  const columns = entries.map((entry, i) => {
    const tall = Number.isFinite(entry.slope) ? Math.max(1, (entry.slope / top) * slopeHeight) : 0;
    return {
      entry,
      state: worstOf(sharesOf(entry, who)),
      unseen: unseenOf(sharesOf(entry, who)),
      x: Number((at[i] * step).toFixed(2)),
      width: Number(step.toFixed(2)),
      y: Number((slopeHeight - tall).toFixed(2)),
      tall: Number(tall.toFixed(2)),
    };
  });
  const marks = [];
  let last = -Infinity;
  columns.forEach((column, i) => {
    const month = column.entry.day.slice(0, 7);
    if ((i === 0 || month !== columns[i - 1].entry.day.slice(0, 7)) && column.x - last > 62) {
      marks.push({ x: column.x, month });
      last = column.x;
    }
  });
  return { columns, marks, top, slopeHeight, stateHeight, width: Number((count * step).toFixed(2)), height: slopeHeight + stateHeight + 4 };
}

/** Of a median, NaN left aside. @param {number[]} values */
export function median(values) {
  const known = values.filter(Number.isFinite).sort((a, b) => a - b);
  const half = known.length >> 1;
  return known.length ? (known.length % 2 ? known[half] : (known[half - 1] + known[half]) / 2) : NaN;
}

/**
 * The quiet days nearest to a day: neither strained nor broken anywhere, at most twenty days away.
 * @param {import("../api.js").DayEntry[]} entries  of one region @param {string} day @param {number} [most]
 * @returns {string[]}
 */
export function quietDays(entries, day, most = 5) {
  const here = Date.parse(day);
  return entries
    .filter((entry) => entry.day !== day && worstOf(entry.shares) === "holds" && Math.abs(Date.parse(entry.day) - here) <= 20 * DAY)
    .sort((a, b) => Math.abs(Date.parse(a.day) - here) - Math.abs(Date.parse(b.day) - here))
    .slice(0, most)
    .map((entry) => entry.day);
}
