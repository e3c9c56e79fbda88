/**
 * When moving fronts would reach sites if they keep course and speed. Pure.
 */

import { placeAt } from "./signs.js";

const KM_PER_DEGREE = 111.2;
// As the service reckons: of the speed where its own spread is not known, and of the place of a front's line.
const SPEED_DOUBT = 0.3;
const PLACE_DOUBT_KM = 6;

/**
 * Kilometres east and north from one place to another, on a plane: good to a few per cent over a region.
 * @param {number} lat @param {number} lon @param {number} toLat @param {number} toLon
 * @returns {[number, number]}
 */
export function away(lat, lon, toLat, toLon) {
  const turn = ((((toLon - lon + 180) % 360) + 360) % 360) - 180;
  return [turn * KM_PER_DEGREE * Math.cos((((lat + toLat) / 2) * Math.PI) / 180), (toLat - lat) * KM_PER_DEGREE];
}

/**
 * @param {import("../api.js").Flag[]} flags
 * @param {{name: string, lat: number, lon: number}[]} sites
 * @param {number} time  ms UTC
 * @param {{horizon?: number, reachKm?: number}} [limits]  how far ahead in ms; how far to the side of the front's middle
 * @returns {{site: string, time: number, spread: number, aside: number, flag: import("../api.js").Flag}[]}  soonest first, one per site; times and spread (one sigma) in ms
 */
export function arrivals(flags, sites, time, { horizon = 3 * 3600000, reachKm = 300 } = {}) {
  /** @type {Map<string, {site: string, time: number, spread: number, aside: number, flag: import("../api.js").Flag}>} */
  const soonest = new Map();
  for (const flag of flags) {
    if (flag.kind !== "front" || !(flag.speed >= 5) || !Number.isFinite(flag.heading) || time < flag.start || time > flag.end) continue;
    const [lat, lon] = placeAt(flag, time);
    const heading = (flag.heading * Math.PI) / 180;
    for (const site of sites) {
      const [east, north] = away(lat, lon, site.lat, site.lon);
      const ahead = east * Math.sin(heading) + north * Math.cos(heading);
      const aside = Math.abs(east * Math.cos(heading) - north * Math.sin(heading));
      const wait = (ahead / flag.speed) * 1e6;
      if (!(ahead > 0) || aside > reachKm || wait > horizon) continue;
      const share = Number.isFinite(flag.speedSigma) ? flag.speedSigma / flag.speed : SPEED_DOUBT;
      const spread = Math.hypot(share * wait, (PLACE_DOUBT_KM / flag.speed) * 1e6);
      const known = soonest.get(site.name);
      if (!known || known.time > time + wait) soonest.set(site.name, { site: site.name, time: time + wait, spread, aside, flag });
    }
  }
  return [...soonest.values()].sort((a, b) => a.time - b.time);
}
