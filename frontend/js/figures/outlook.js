/**
 * The two days ahead as shapes: the delay with its ranges above, the chances below, one axis of hours. Pure.
 */

import { roundEnd } from "../colour.js";
import { hourText, dateText } from "../words.js";

const HOUR = 3600000;

/**
 * A band between two curves as one path; broken where an end is not known.
 * @param {number[]} low @param {number[]} high @param {(i: number) => number} x @param {(value: number) => number} y
 */
function band(low, high, x, y) {
  let path = "";
  for (let i = 0; i < low.length; i++) {
    if (!Number.isFinite(low[i]) || !Number.isFinite(high[i])) continue;
    let last = i;
    while (last + 1 < low.length && Number.isFinite(low[last + 1]) && Number.isFinite(high[last + 1])) last += 1;
    const numbers = Array.from({ length: last - i + 1 }, (_, k) => i + k);
    path += `M${numbers.map((k) => `${x(k)} ${y(high[k])}`).join("L")}L${numbers.reverse().map((k) => `${x(k)} ${y(low[k])}`).join("L")}Z`;
    i = last;
  }
  return path;
}

/**
 * An hour whose chance is not known has no height: it is a column of its own, `unknown`, over the whole of the scale.
 * @param {object} contents
 * @param {{hours: number[], delay: number[], ranges: Record<string, {low: number[], high: number[]}>, strained: number[], broken: number[]}} contents.outlook
 * @param {number} contents.width  pixels
 * @param {string} contents.zone  of the hours written
 */
export function outlookFigure({ outlook, width, zone, left = 40, delayHeight = 150, chanceHeight = 64 }) {
  const { hours, delay, ranges, strained, broken } = outlook;
  const step = (width - left - 8) / Math.max(1, hours.length);
  const round = (v) => Number(v.toFixed(2));
  const middle = (i) => round(left + (i + 0.5) * step);
  const known = [...delay, ...Object.values(ranges).flatMap(({ high }) => high)].filter(Number.isFinite);
  const top = roundEnd(Math.max(0.5, ...known));
  const y = (value) => round(delayHeight - (Math.min(top, Math.max(0, value)) / top) * (delayHeight - 8));
  const bands = Object.keys(ranges).sort((a, b) => Number(b) - Number(a)).map((share) => ({ share, path: band(ranges[share].low, ranges[share].high, middle, y) }));
  const line = delay.reduce((path, v, i) => (Number.isFinite(v) ? `${path}${Number.isFinite(delay[i - 1]) ? "L" : "M"}${middle(i)} ${y(v)}` : path), "");
  const base = delayHeight + 22 + chanceHeight;
  const columns = hours.map((ms, i) => {
    const place = { ms, x: round(left + i * step), width: round(step) };
    if (!Number.isFinite(broken[i]) || !Number.isFinite(strained[i])) return { ...place, unknown: { y: round(base - chanceHeight), tall: chanceHeight }, broken: null, strained: null };
    const worse = broken[i] * chanceHeight;
    const bad = Math.max(worse, strained[i] * chanceHeight);
    return { ...place, unknown: null, broken: { y: round(base - worse), tall: round(worse) }, strained: { y: round(base - bad), tall: round(bad - worse) } };
  });
  const every = step * 3 > 44 ? 3 : step * 6 > 44 ? 6 : 12;
  const ticks = hours.flatMap((ms, i) => {
    const hour = Number(hourText(ms, zone).slice(0, 2));
    return hour % every ? [] : [{ x: round(left + i * step), text: hourText(ms, zone), day: hour === 0 || i === 0 ? dateText(ms, zone).replace(/ \d{4}$/, "") : "" }];
  });
  return {
    bands, line, columns, ticks, top, left, delayHeight, base,
    width, height: base + 34,
    marks: [0, 0.5, 1].map((part) => ({ y: y(part * top), value: part * top })),
    parts: [0, 0.5, 1].map((part) => ({ y: round(base - part * chanceHeight), value: part })),
    span: [hours[0], (hours[hours.length - 1] ?? 0) + HOUR],
  };
}
