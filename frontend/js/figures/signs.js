/**
 * The drawn signs of the chart, as lines in degrees: fronts with their comb, patches, slopes, faults. Pure.
 * A kilometre is taken as 1/111.2 degree of latitude, and longitudes are stretched by the cosine of the latitude.
 */

/** @typedef {{x: (number|null)[], y: (number|null)[]}} Line */
/** @typedef {{south: number, north: number, west: number, east: number}} Frame */

const KM_PER_DEGREE = 111.2;

/**
 * The point that lies east and north of another by kilometres.
 * @param {number} lat @param {number} lon @param {number} eastKm @param {number} northKm
 * @returns {[number, number]} lat, lon
 */
export function offset(lat, lon, eastKm, northKm) {
  return [lat + northKm / KM_PER_DEGREE, lon + eastKm / (KM_PER_DEGREE * Math.cos((lat * Math.PI) / 180))];
}

/**
 * Kilometres east and north from one place to another, on a plane: good to a few per cent over a region.
 * @param {number} lat @param {number} lon @param {number} toLat @param {number} toLon
 * @returns {[number, number]}
 */
export function away(lat, lon, toLat, toLon) {
  const turn = ((((toLon - lon + 180) % 360) + 360) % 360) - 180;
  return [turn * KM_PER_DEGREE * Math.cos((((lat + toLat) / 2) * Math.PI) / 180), (toLat - lat) * KM_PER_DEGREE];
}

/** @param {number} lat @param {number} lon @param {Frame} frame */
export function within(lat, lon, frame) {
  return lat >= frame.south && lat <= frame.north && lon >= frame.west && lon <= frame.east;
}

/** Width of a frame along its middle latitude, in km. @param {Frame} frame */
export function widthKm(frame) {
  const middle = ((frame.south + frame.north) / 2) * (Math.PI / 180);
  return (frame.east - frame.west) * KM_PER_DEGREE * Math.cos(middle);
}

/**
 * Where a flag is at a time: along its track where it has one, else its own place.
 * @param {{lat: number, lon: number, track?: {time: number, lat: number, lon: number}[]}} flag
 * @param {number} time
 * @returns {[number, number]}
 */
export function placeAt(flag, time) {
  const track = flag.track ?? [];
  if (!track.length) return [flag.lat, flag.lon];
  const after = track.findIndex((point) => point.time >= time);
  if (after === 0) return [track[0].lat, track[0].lon];
  if (after < 0) return [track[track.length - 1].lat, track[track.length - 1].lon];
  const [a, b] = [track[after - 1], track[after]];
  const part = b.time > a.time ? (time - a.time) / (b.time - a.time) : 0;
  return [a.lat + part * (b.lat - a.lat), a.lon + part * (b.lon - a.lon)];
}

/**
 * A front: the stroke across its heading, the comb on the side it moves to, and where its speed is written.
 * @param {number} lat @param {number} lon
 * @param {number} heading  degrees from north through east, toward
 * @param {Frame} frame  what lies outside is left off
 * @param {number} [halfKm]  half the length of the stroke
 * @returns {{stroke: Line, comb: Line, label: {lat: number, lon: number, angle: number}}}
 */
export function front(lat, lon, heading, frame, halfKm = 0.2 * widthKm(frame)) {
  const h = (heading * Math.PI) / 180;
  const [aheadEast, aheadNorth] = [Math.sin(h), Math.cos(h)];
  const [alongEast, alongNorth] = [Math.cos(h), -Math.sin(h)]; // to the right of the heading
  const spacing = halfKm / 7;
  const tooth = spacing * 1.05;
  /** @type {Line} */ const stroke = { x: [], y: [] };
  /** @type {Line} */ const comb = { x: [], y: [] };
  for (let i = -7; i <= 7; i++) {
    const [la, lo] = offset(lat, lon, alongEast * spacing * i, alongNorth * spacing * i);
    if (!within(la, lo, frame)) continue;
    stroke.x.push(lo);
    stroke.y.push(la);
    const [tipLat, tipLon] = offset(la, lo, aheadEast * tooth, aheadNorth * tooth);
    if (i % 7 === 0 || !within(tipLat, tipLon, frame)) continue;
    comb.x.push(lo, tipLon, null);
    comb.y.push(la, tipLat, null);
  }
  // The writing stands behind the stroke, along it, never upside down.
  const [labelLat, labelLon] = offset(lat, lon, -aheadEast * spacing * 1.3, -aheadNorth * spacing * 1.3);
  let angle = heading % 180;
  if (angle > 90) angle -= 180;
  return { stroke, comb, label: { lat: labelLat, lon: labelLon, angle: Number(angle.toFixed(1)) } };
}

/**
 * An irregular patch: three short waves. A sign of fixed size, since a flag tells a place and no extent.
 * @param {number} lat @param {number} lon @param {number} sizeKm
 * @returns {Line}
 */
export function waves(lat, lon, sizeKm) {
  /** @type {Line} */ const line = { x: [], y: [] };
  for (const level of [-0.5, 0, 0.5]) {
    for (let i = 0; i <= 16; i++) {
      const part = i / 16 - 0.5;
      const [la, lo] = offset(lat, lon, part * 2 * sizeKm, (level + 0.16 * Math.sin(part * 4 * Math.PI)) * sizeKm);
      line.x.push(lo);
      line.y.push(la);
    }
    line.x.push(null);
    line.y.push(null);
  }
  return line;
}

/**
 * A steep slope that does not move as a front: a ramp, high on the side where the delay is larger if that is known.
 * @param {number} lat @param {number} lon @param {number} sizeKm
 * @returns {Line}
 */
export function wedge(lat, lon, sizeKm) {
  const corners = [[-1, -0.6], [1, -0.6], [1, 0.7], [-1, -0.6]];
  const points = corners.map(([e, n]) => offset(lat, lon, e * sizeKm, n * sizeKm));
  return { x: [...points.map((p) => p[1]), null], y: [...points.map((p) => p[0]), null] };
}

/**
 * A fault of the data: a broken bar, two halves that do not meet.
 * @param {number} lat @param {number} lon @param {number} sizeKm
 * @returns {Line}
 */
export function brokenBar(lat, lon, sizeKm) {
  const parts = [[[-1, -0.35], [-0.1, -0.35], [0.15, 0.55]], [[-0.15, -0.55], [0.1, 0.35], [1, 0.35]]];
  /** @type {Line} */ const line = { x: [], y: [] };
  for (const part of parts) {
    for (const [e, n] of part) {
      const [la, lo] = offset(lat, lon, e * sizeKm, n * sizeKm);
      line.x.push(lo);
      line.y.push(la);
    }
    line.x.push(null);
    line.y.push(null);
  }
  return line;
}

/**
 * Even steps for a graticule: 1, 2 or 5 times a power of ten, at most `most` of them over the span.
 * @param {number} from @param {number} to @param {number} most
 */
export function gradations(from, to, most) {
  const rough = (to - from) / most;
  const power = 10 ** Math.floor(Math.log10(rough));
  const step = ([1, 2, 5, 10].find((s) => s * power >= rough * 0.999) ?? 10) * power;
  const values = [];
  for (let v = Math.ceil(from / step - 1e-9) * step; v <= to + 1e-9; v += step) values.push(Number(v.toFixed(6)));
  return { step, values };
}

/**
 * A round length for a scale bar, near a quarter of the frame's width.
 * @param {Frame} frame
 */
export function scaleBarKm(frame) {
  const target = widthKm(frame) / 4;
  const power = 10 ** Math.floor(Math.log10(target));
  return ([5, 2, 1].find((s) => s * power <= target) ?? 1) * power;
}
