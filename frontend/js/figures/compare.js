/**
 * Two days against each other: the median of some maps, and the difference of two. Pure.
 */

import { roundEnd } from "../colour.js";
import { median } from "./year.js";

const NUMBERS = ["delay", "uncertainty", "slope"];

/**
 * One map: the median over maps of the same grid, cell by cell. Where fewer than half have a number it is unseen.
 * @param {{fields: import("../api.js").Window, index: number}[]} maps
 * @returns {{fields: import("../api.js").Window, index: number}}
 */
export function medianMap(maps) {
  const { lats, lons } = maps[0].fields;
  const size = lats.length * lons.length;
  const layers = { state: new Uint8Array(size), delay: new Float32Array(size), uncertainty: new Float32Array(size), slope: new Float32Array(size) };
  for (let at = 0; at < size; at++) {
    for (const name of NUMBERS) {
      const values = maps.map(({ fields, index }) => fields.layers[name][index * size + at]).filter(Number.isFinite);
      layers[name][at] = 2 * values.length > maps.length ? median(values) : NaN;
    }
    // Quiet days hold wherever they are seen.
    layers.state[at] = Number.isFinite(layers.delay[at]) ? 1 : 0;
  }
  return { fields: { times: [maps[0].fields.times[maps[0].index]], lats, lons, layers }, index: 0 };
}

/** Do two windows stand on one grid? @param {import("../api.js").Window} a @param {import("../api.js").Window} b */
export function sameGrid(a, b) {
  const alike = (p, q) => p.length === q.length && p.every((v, i) => Math.abs(v - q[i]) < 1e-6);
  return alike(Array.from(a.lats), Array.from(b.lats)) && alike(Array.from(a.lons), Array.from(b.lons));
}

/**
 * The first map less the second; unseen wherever one of them is.
 * @param {{fields: import("../api.js").Window, index: number}} first
 * @param {{fields: import("../api.js").Window, index: number}} second
 */
export function differenceMap(first, second) {
  const { lats, lons, times } = first.fields;
  const size = lats.length * lons.length;
  const layers = { state: new Uint8Array(size), delay: new Float32Array(size), uncertainty: new Float32Array(size), slope: new Float32Array(size) };
  for (let at = 0; at < size; at++) {
    const [a, b] = [first.index * size + at, second.index * size + at];
    const seen = first.fields.layers.state[a] > 0 && second.fields.layers.state[b] > 0;
    for (const name of NUMBERS) layers[name][at] = seen ? first.fields.layers[name][a] - second.fields.layers[name][b] : NaN;
    layers.state[at] = seen ? 1 : 0;
  }
  return { fields: { times: [times[first.index]], lats, lons, layers }, index: 0 };
}

/** Ends of the scale of a difference: half of the layer's own to either side. @param {Record<string, [number, number]>} ends */
export function differenceEnds(ends) {
  return Object.fromEntries(NUMBERS.map((name) => [name, [-roundEnd(ends[name][1] / 2), roundEnd(ends[name][1] / 2)]]));
}
