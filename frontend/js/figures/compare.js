/**
 * Two days against each other: the median of some maps, and the difference of two. Pure.
 */

import { roundEnd } from "../colour.js";
import { told } from "./map.js";
import { nearest } from "./strip.js";
import { median } from "./year.js";

const NUMBERS = ["delay", "uncertainty", "slope"];

/** Layers of one map, empty. @param {number} size */
const blank = (size) => ({ state: new Uint8Array(size), support: new Uint16Array(size), delay: new Float32Array(size).fill(NaN), uncertainty: new Float32Array(size).fill(NaN), slope: new Float32Array(size).fill(NaN) });

/** The state that stands for several: never better than more than half of them. @param {number[]} states */
const medianState = (states) => {
  const most = (/** @type {(state: number) => boolean} */ kind) => 2 * states.filter(kind).length > states.length;
  if (!most((state) => state > 0)) return 0;
  return most((state) => state === 1) ? 1 : Math.max(...states);
};

/**
 * One map: the median over maps of the same grid, cell by cell, of what they tell. Where fewer than half tell a number
 * there is none. Corrections hold where more than half hold; else the worst that any map tells; where half or more see
 * nothing, it is unseen.
 * @param {{fields: import("../api.js").Window, index: number}[]} maps @param {number} unseenSigma
 * @returns {{fields: import("../api.js").Window, index: number}}
 */
export function medianMap(maps, unseenSigma) {
  const { lats, lons } = maps[0].fields;
  const size = lats.length * lons.length;
  const layers = blank(size);
  for (let at = 0; at < size; at++) {
    for (const name of NUMBERS) {
      const values = maps.filter(({ fields, index }) => told(fields, index * size + at, name, unseenSigma)).map(({ fields, index }) => fields.layers[name][index * size + at]);
      if (2 * values.length > maps.length) layers[name][at] = median(values);
    }
    layers.state[at] = medianState(maps.map(({ fields, index }) => fields.layers.state[index * size + at]));
    layers.support[at] = Number.isFinite(layers.delay[at]) ? 1 : 0;
  }
  return { fields: { times: [maps[0].fields.times[maps[0].index]], lats, lons, layers }, index: 0 };
}

/**
 * The delay of other days at one place, brought to the times of this day: the median of what they tell at the same time
 * of day. NaN where fewer than half tell a number.
 * @param {{times: number[], delay: number[]}[]} others @param {number[]} shifts  ms from this day's midnight to theirs
 * @param {number[]} times  of this day
 */
export function medianDelay(others, shifts, times) {
  const near = 15 * 60000;
  return times.map((ms) => {
    const values = others.map(({ times: theirs, delay }, i) => {
      const at = nearest(theirs, ms + shifts[i]);
      return Math.abs(theirs[at] - ms - shifts[i]) <= near ? delay[at] : NaN;
    });
    return 2 * values.filter(Number.isFinite).length > values.length ? median(values) : NaN;
  });
}

/** Do two windows stand on one grid? @param {import("../api.js").Window} a @param {import("../api.js").Window} b */
export function sameGrid(a, b) {
  const alike = (p, q) => p.length === q.length && p.every((v, i) => Math.abs(v - q[i]) < 1e-6);
  return alike(Array.from(a.lats), Array.from(b.lats)) && alike(Array.from(a.lons), Array.from(b.lons));
}

/**
 * The first map less the second, where both tell a number; dotted elsewhere.
 * @param {{fields: import("../api.js").Window, index: number}} first
 * @param {{fields: import("../api.js").Window, index: number}} second
 * @param {number} unseenSigma
 */
export function differenceMap(first, second, unseenSigma) {
  const { lats, lons, times } = first.fields;
  const size = lats.length * lons.length;
  const layers = blank(size);
  for (let at = 0; at < size; at++) {
    const [a, b] = [first.index * size + at, second.index * size + at];
    for (const name of NUMBERS) {
      if (told(first.fields, a, name, unseenSigma) && told(second.fields, b, name, unseenSigma)) layers[name][at] = first.fields.layers[name][a] - second.fields.layers[name][b];
    }
    layers.state[at] = Number.isFinite(layers.delay[at]) ? 1 : 0;
  }
  return { fields: { times: [times[first.index]], lats, lons, layers }, index: 0 };
}

/** Ends of the scale of a difference: half of the layer's own to either side. @param {Record<string, [number, number]>} ends */
export function differenceEnds(ends) {
  return Object.fromEntries(NUMBERS.map((name) => [name, [-roundEnd(ends[name][1] / 2), roundEnd(ends[name][1] / 2)]]));
}
