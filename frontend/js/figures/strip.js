/**
 * The day as a strip: one row per site, time from left to right. Gives shapes in pixels; draws nothing itself. Pure.
 */

import { STATES } from "../colour.js";
import { hourText } from "../words.js";

/** @typedef {import("../colour.js").StateName} StateName */
/** @typedef {{state: StateName, first: number, last: number, from: number, to: number, reason: string}} Run */

/**
 * Runs of equal state along a row.
 * @param {ArrayLike<number>} codes  one per time
 * @param {number[]} times  ms UTC, evenly spaced
 * @param {string[]} [reasons]
 * @returns {Run[]}  from and to in ms: each epoch stands for half a step to either side
 */
export function runs(codes, times, reasons = []) {
  const half = stepOf(times) / 2;
  /** @type {Run[]} */ const out = [];
  for (let i = 0; i < times.length; i++) {
    const state = STATES[codes[i]] ?? "unseen";
    const last = out[out.length - 1];
    if (last && last.state === state) {
      last.last = i;
      last.to = times[i] + half;
      if (!last.reason) last.reason = reasons[i] ?? "";
    } else {
      out.push({ state, first: i, last: i, from: times[i] - half, to: times[i] + half, reason: reasons[i] ?? "" });
    }
  }
  return out;
}

/** @param {number[]} times */
export function stepOf(times) {
  return times.length > 1 ? times[1] - times[0] : 300000;
}

/**
 * The time nearest to a wish.
 * @param {number[]} times  rising
 * @param {number} wish
 */
export function nearest(times, wish) {
  let best = 0;
  for (let i = 1; i < times.length; i++) if (Math.abs(times[i] - wish) < Math.abs(times[best] - wish)) best = i;
  return best;
}

/**
 * Where a key leads from a time: arrows 5 minutes, with shift an hour, Home and End to the day's ends.
 * @param {string} key
 * @param {boolean} shift
 * @param {number} index
 * @param {number[]} times
 * @returns {number|null}  the new index, or null for other keys
 */
export function keyStep(key, shift, index, times) {
  const last = times.length - 1;
  const stride = (minutes) => Math.max(1, Math.round((minutes * 60000) / stepOf(times)));
  const moves = {
    ArrowRight: shift ? stride(60) : stride(5),
    ArrowUp: shift ? stride(60) : stride(5),
    ArrowLeft: -(shift ? stride(60) : stride(5)),
    ArrowDown: -(shift ? stride(60) : stride(5)),
    PageUp: stride(60),
    PageDown: -stride(60),
    Home: -Infinity,
    End: Infinity,
  };
  if (!(key in moves)) return null;
  return Math.min(last, Math.max(0, index + moves[key]));
}

/**
 * @param {object} contents
 * @param {{name: string, codes: ArrayLike<number>, reasons?: string[]}[]} contents.rows
 * @param {number[]} contents.times
 * @param {import("../api.js").Flag[]} contents.flags
 * @param {number} contents.width   pixels of the time axis
 * @param {number} contents.rowHeight
 * @param {string} contents.zone
 */
export function stripFigure({ rows, times, flags, width, rowHeight, zone }) {
  const half = stepOf(times) / 2;
  const from = times[0] - half;
  const to = times[times.length - 1] + half;
  const x = (ms) => Number((((Math.min(to, Math.max(from, ms)) - from) / (to - from)) * width).toFixed(2));
  const flagHeight = 14;
  const gap = 3;
  const bars = rows.flatMap((row, number) =>
    runs(row.codes, times, row.reasons).map((run) => ({
      ...run,
      row: number,
      x: x(run.from),
      y: flagHeight + number * (rowHeight + gap),
      width: Number((x(run.to) - x(run.from)).toFixed(2)),
      height: rowHeight,
    })),
  );
  // Flags that overlap in time share the upper band in up to three lanes.
  const lanes = [-Infinity, -Infinity, -Infinity];
  const marks = [...flags]
    .sort((a, b) => a.start - b.start)
    .map((flag) => {
      let lane = lanes.findIndex((end) => end <= flag.start);
      if (lane < 0) lane = 2;
      lanes[lane] = Math.max(lanes[lane], flag.end);
      return { flag, x: x(flag.start), width: Math.max(2, x(flag.end) - x(flag.start)), y: 1 + lane * 4, height: 3 };
    });
  const height = flagHeight + Math.max(1, rows.length) * (rowHeight + gap);
  return { from, to, width, height, bars, marks, ticks: hourTicks(from, to, x, width, zone), x };
}

/**
 * Whole hours of UTC, and the same hours written in local time.
 */
function hourTicks(from, to, x, width, zone) {
  const hour = 3600000;
  const every = width > 900 ? 2 : width > 460 ? 3 : 6;
  const ticks = [];
  // Epochs of GPS time start a few leap seconds before the day of UTC: count from the nearest hour.
  const first = Math.ceil((from - 60000) / hour) * hour;
  for (let ms = first; ms <= to + 60000; ms += hour) {
    const number = Math.round(ms / hour) % 24;
    ticks.push({ x: x(ms), major: number % every === 0, utc: hourText(ms), local: hourText(ms, zone) });
  }
  return ticks;
}
