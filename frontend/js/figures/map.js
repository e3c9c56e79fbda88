/**
 * The map: field, coast, receivers, pierce points, sites, flags and the chosen place, as a plotly figure. Pure.
 */

import { PALETTES, STATES, ramp, scale, withAlpha } from "../colour.js";
import { fixed, LAYER_WORDS, latText, lonText, shortened, STATE_WORDS } from "../words.js";
import { outline, rowsOf } from "./cells.js";
import { brokenBar, front, gradations, offset, placeAt, scaleBarKm, waves, wedge, widthKm, within } from "./signs.js";

/** @typedef {import("../colour.js").Theme} Theme */
/** @typedef {import("../state.js").Layer} Layer */
/** @typedef {import("./signs.js").Frame} Frame */

/**
 * @typedef {object} MapContents
 * @property {Frame} frame     edges of the chart [deg]
 * @property {Layer} layer
 * @property {Theme} theme
 * @property {number} time     ms UTC
 * @property {import("../api.js").Window|null} [fields]
 * @property {number} [index]  which time of `fields`
 * @property {{delay: [number, number], uncertainty: [number, number], slope: [number, number]}} ends  scale ends
 * @property {number} unseenSigma  sigma of the delay [m] from which a cell is not seen
 * @property {[number, number][][]} [coast]  lines of lat, lon
 * @property {{name: string, lat: number, lon: number, fresh?: boolean}[]} [receivers]
 * @property {{lat: number, lon: number, elevation: number}[]} [rays]
 * @property {{name: string, lat: number, lon: number, state?: import("../colour.js").StateName}[]} [sites]
 * @property {import("../api.js").Flag[]} [flags]  those raised at this time
 * @property {[number, number]|null} [place]
 * @property {boolean} [difference]  the fields are one day less another
 * @property {boolean} [veil]  let the paper show through where the delay is unsure
 * @property {number} [width]  pixels, for the count of gradations and signs
 * @property {string} [title]  for a printed chart: adds title, colour bar and caution
 * @property {string} [foot]
 */

/** Edges of the chart: half a cell beyond the outermost grid nodes. @param {{lats: ArrayLike<number>, lons: ArrayLike<number>}} grid @returns {Frame} */
export function frameOf({ lats, lons }) {
  const halfLat = lats.length > 1 ? (lats[1] - lats[0]) / 2 : 0.5;
  const halfLon = lons.length > 1 ? (lons[1] - lons[0]) / 2 : 0.5;
  return {
    south: lats[0] - halfLat,
    north: lats[lats.length - 1] + halfLat,
    west: lons[0] - halfLon,
    east: lons[lons.length - 1] + halfLon,
  };
}

/** Width over height of a chart drawn true to shape at its middle latitude. @param {Frame} frame */
export function aspectOf(frame) {
  const middle = ((frame.south + frame.north) / 2) * (Math.PI / 180);
  return ((frame.east - frame.west) * Math.cos(middle)) / (frame.north - frame.south);
}

/**
 * The chart as a figure. `notes` are words along lines: for plotly they also stand among the layout's annotations.
 * @param {MapContents} contents
 * @returns {{data: any[], layout: any, notes: any[]}}
 */
export function mapFigure(contents) {
  const palette = PALETTES[contents.theme];
  const k = sizeFactor(contents.width);
  const data = [
    ...fieldTraces(contents),
    ...coastTraces(contents.coast ?? [], palette),
    ...rayTraces(contents.rays ?? [], palette, k),
    ...receiverTraces(contents.receivers ?? [], palette, k),
    ...placeTraces(contents.place ?? null, contents.frame, palette),
  ];
  const { traces, notes } = flagTraces(contents, palette, k);
  data.push(...traces, ...siteTraces(contents, palette, k));
  const layout = layoutOf(contents, palette);
  if (contents.title) layout.annotations.push(...notes.map(({ rim, ...note }) => ({ ...note, font: { ...note.font, shadow: halo(palette) } })));
  return { data, layout, notes };
}

/** Signs and words grow a little with the chart. @param {number} [width]  pixels */
function sizeFactor(width = 700) {
  return Math.min(1.6, Math.max(1, width / 640));
}

/**
 * The warnings that stand over cells without a number on a layer: they are drawn there by their pattern.
 * @param {import("../api.js").Window|null|undefined} fields
 * @param {number} index
 * @param {Layer} layer
 * @returns {import("../colour.js").StateName[]}
 */
export function bareWarnings(fields, index, layer) {
  if (!fields || index < 0 || layer === "state" || !fields.layers[layer] || !fields.layers.state) return [];
  const size = fields.lats.length * fields.lons.length;
  const found = new Set();
  for (let at = index * size; at < (index + 1) * size; at++) {
    if (fields.layers.state[at] >= 2 && !Number.isFinite(fields.layers[layer][at])) found.add(STATES[fields.layers.state[at]]);
  }
  return ["strained", "broken"].filter((state) => found.has(state));
}

/**
 * Is the number of a cell shown on a layer? Where the state is unseen, the delay may still be known well enough: seen by
 * lines of sight and within the limit of its sigma. Then it is shown, under dots. Out of the network's sight, or where
 * the number says too little, nothing is.
 * @param {import("../api.js").Window} fields
 * @param {number} at  the cell, counted through all times
 * @param {Layer} layer
 * @param {number} unseenSigma
 */
export function told(fields, at, layer, unseenSigma) {
  const { layers } = fields;
  if (layer === "state" || !layers[layer] || !Number.isFinite(layers[layer][at])) return false;
  if (layers.state?.[at] !== 0) return true;
  return layer !== "slope" && Number.isFinite(layers.delay[at]) && layers.support?.[at] > 0 && layers.uncertainty[at] <= unseenSigma;
}

/** Are there unseen cells of which the layer tells a number? @param {MapContents} contents */
export function dottedNumbers({ fields, index = 0, layer, unseenSigma }) {
  if (!fields || index < 0 || layer === "state") return false;
  const size = fields.lats.length * fields.lons.length;
  for (let at = index * size; at < (index + 1) * size; at++) {
    if (fields.layers.state[at] === 0 && told(fields, at, layer, unseenSigma)) return true;
  }
  return false;
}

const QUIET = { hoverinfo: "skip", showlegend: false };

/** @param {MapContents} contents */
function fieldTraces(contents) {
  const { fields, index = 0, layer, theme } = contents;
  if (!fields || index < 0 || index >= fields.times.length) return [];
  const [rows, columns] = [fields.lats.length, fields.lons.length];
  const palette = PALETTES[theme];
  const stateAt = (r, c) => fields.layers.state?.[(index * rows + r) * columns + c] ?? 0;
  const shown = (r, c) => told(fields, (index * rows + r) * columns + c, layer, contents.unseenSigma);
  const numberAt = (r, c) => layer === "state" || shown(r, c);
  const traces = [];
  if (layer === "state") {
    for (const code of [1, 2, 3]) traces.push(stateTrace(STATES[code], (r, c) => stateAt(r, c) === code, fields, palette));
  } else {
    const values = fields.layers[layer];
    if (!values) return [];
    const ends = contents.ends[layer];
    const colours = ramp(contents.difference ? "difference" : layer, theme);
    traces.push({
      ...QUIET,
      type: "heatmap",
      name: layer,
      x: Array.from(fields.lons),
      y: Array.from(fields.lats),
      // What cannot be said is not drawn as if it could.
      z: rowsOf(values, index, rows, columns, (v, at) => (told(fields, at, layer, contents.unseenSigma) ? v : null)),
      zmin: ends[0],
      zmax: ends[1],
      zsmooth: false,
      colorscale: scale(colours),
      showscale: Boolean(contents.title),
      colorbar: contents.title ? colourBar(layer, palette) : undefined,
    });
    if (contents.veil && layer === "delay" && fields.layers.uncertainty) {
      const limit = contents.unseenSigma;
      traces.push({
        ...QUIET,
        type: "heatmap",
        name: "veil",
        x: Array.from(fields.lons),
        y: Array.from(fields.lats),
        z: rowsOf(fields.layers.uncertainty, index, rows, columns, (v) => (Number.isFinite(v) ? v / limit : null)),
        zmin: 0,
        zmax: 1,
        zsmooth: false,
        showscale: false,
        colorscale: [
          [0, withAlpha(palette.paper, 0)],
          [0.2, withAlpha(palette.paper, 0)],
          [1, withAlpha(palette.paper, 0.8)],
        ],
      });
    }
  }
  // Without a number: dots, or the pattern of a warning that reaches over the cell from what was seen near by.
  const dotted = (r, c) => layer !== "state" && stateAt(r, c) === 0 && shown(r, c);
  traces.push(stateTrace("unseen", (r, c) => (stateAt(r, c) === 0 && !dotted(r, c)) || (stateAt(r, c) === 1 && !numberAt(r, c)), fields, palette));
  if (layer !== "state") traces.push(stateTrace("unseen", dotted, fields, palette, "dots"));
  for (const state of bareWarnings(fields, index, layer)) {
    traces.push(stateTrace(state, (r, c) => STATES[stateAt(r, c)] === state && !numberAt(r, c), fields, palette));
  }
  return traces;
}

/**
 * Cells of one state as one outline with its pattern.
 * @param {import("../colour.js").StateName} state
 */
function stateTrace(state, inside, fields, palette, name = state) {
  const { x, y } = outline(inside, fields.lats, fields.lons);
  // Dots over a number: of ink and of paper by turns, on a thin veil, so that they show on every colour of the ramp.
  const colours = name === "dots" ? { fill: withAlpha(palette.paper, 0.25), edge: palette.states.unseen.edge, line: palette.ink } : palette.states[state];
  const pattern = {
    unseen: { shape: ".", size: 7, solidity: 0.12 },
    holds: { shape: "" },
    strained: { shape: "/", size: 9, solidity: 0.16 },
    broken: { shape: "x", size: 9, solidity: 0.14 },
  }[state];
  return {
    ...QUIET,
    type: "scatter",
    mode: "lines",
    name,
    x,
    y,
    ...(name === "dots" ? { meta: { second: palette.paper } } : {}),
    fill: "toself",
    fillcolor: colours.fill,
    fillpattern: pattern.shape
      ? { ...pattern, fgcolor: colours.line, bgcolor: colours.fill, fillmode: "replace" }
      : undefined,
    line: { color: colours.edge, width: state === "holds" ? 0 : state === "unseen" ? 0.6 : 1.2, simplify: false },
  };
}

function coastTraces(coast, palette) {
  /** @type {(number|null)[]} */ const x = [];
  /** @type {(number|null)[]} */ const y = [];
  for (const line of coast) {
    for (const [lat, lon] of line) {
      x.push(lon);
      y.push(lat);
    }
    x.push(null);
    y.push(null);
  }
  const common = { ...QUIET, type: "scatter", mode: "lines", x, y };
  return [
    { ...common, name: "coast halo", line: { color: withAlpha(palette.paper, 0.6), width: 2.8, simplify: false } },
    { ...common, name: "coast", line: { color: palette.ink, width: 1.1, simplify: false } },
  ];
}

function rayTraces(rays, palette, k) {
  return [
    {
      ...QUIET,
      type: "scatter",
      mode: "markers",
      name: "pierce points",
      x: rays.map((ray) => ray.lon),
      y: rays.map((ray) => ray.lat),
      marker: {
        size: rays.map((ray) => k * (2.5 + (4 * Math.max(0, Math.min(90, ray.elevation))) / 90)),
        color: palette.ink,
        line: { color: palette.paper, width: 0.8 },
        opacity: 0.9,
      },
    },
  ];
}

/** A ring, with a point inside where data are there. */
function receiverTraces(receivers, palette, k) {
  const fresh = receivers.filter((receiver) => receiver.fresh !== false);
  const common = { ...QUIET, type: "scatter", mode: "markers" };
  return [
    {
      ...common,
      name: "receivers",
      x: receivers.map((receiver) => receiver.lon),
      y: receivers.map((receiver) => receiver.lat),
      marker: { symbol: "circle", size: 10.5 * k, color: palette.raised, line: { color: palette.ink, width: 1.4 * k } },
    },
    {
      ...common,
      name: "receivers with data",
      x: fresh.map((receiver) => receiver.lon),
      y: fresh.map((receiver) => receiver.lat),
      marker: { symbol: "circle", size: 4.5 * k, color: palette.ink, line: { color: palette.ink, width: 0 } },
    },
  ];
}

/** @param {MapContents} contents */
function siteTraces(contents, palette, k) {
  // The worst first: where names would lie on each other, theirs is the one that stays.
  const rank = { broken: 0, strained: 1, unseen: 2, holds: 3 };
  const sites = [...(contents.sites ?? [])].sort((a, b) => (rank[a.state] ?? 3) - (rank[b.state] ?? 3));
  const loud = (site) => site.state === "broken" || site.state === "strained";
  return [
    {
      ...QUIET,
      type: "scatter",
      mode: "markers+text",
      name: "sites",
      x: sites.map((site) => site.lon),
      y: sites.map((site) => site.lat),
      text: sites.map((site) => `<b>${site.name.slice(0, 1)}</b>`),
      textfont: { size: 11 * k, color: sites.map((site) => (site.state === "broken" ? palette.paper : palette.ink)) },
      marker: {
        symbol: "octagon",
        size: 19 * k,
        color: sites.map((site) => (site.state === "broken" ? palette.states.broken.fill : palette.raised)),
        line: {
          width: sites.map((site) => k * (loud(site) ? 2.6 : 1.3)),
          color: sites.map((site) => (site.state ? palette.states[site.state].edge : palette.ink)),
        },
      },
    },
    {
      ...QUIET,
      type: "scatter",
      mode: "text",
      name: "site names",
      x: sites.map((site) => site.lon),
      y: sites.map((site) => site.lat),
      text: sites.map((site) => `<br>${shortened(site.name, 22)}${loud(site) || site.state === "unseen" ? ` · ${STATE_WORDS[site.state].name}` : ""}`),
      textposition: "bottom center",
      textfont: { size: 12 * k, color: palette.ink, ...(contents.title ? { shadow: halo(palette) } : {}) },
      meta: { rim: palette.paper, apart: true },
    },
  ];
}

/** A soft rim of paper behind writing, so that it reads on dark cells. */
function halo(palette) {
  const rim = [];
  for (const x of [-1, 0, 1]) for (const y of [-1, 0, 1]) if (x || y) rim.push(`${x}px ${y}px 1px ${palette.paper}`);
  return rim.join(", ");
}

/** @param {MapContents} contents */
function flagTraces(contents, palette, k) {
  const { frame, flags = [], time } = contents;
  const size = widthKm(frame) / 42;
  const loud = { x: [], y: [] };
  const lines = { broken: { x: [], y: [] }, strained: { x: [], y: [] }, other: { x: [], y: [] } };
  const combs = { broken: { x: [], y: [] }, strained: { x: [], y: [] }, other: { x: [], y: [] } };
  const notes = [];
  const append = (to, line) => {
    to.x.push(...line.x, null);
    to.y.push(...line.y, null);
  };
  for (const flag of flags) {
    const [lat, lon] = placeAt(flag, time);
    const tone = flag.state === "broken" || flag.state === "strained" ? flag.state : "other";
    if (flag.kind === "front" && Number.isFinite(flag.heading)) {
      const drawn = front(lat, lon, flag.heading, frame);
      append(loud, drawn.stroke);
      append(loud, drawn.comb);
      append(lines[tone], drawn.stroke);
      append(combs[tone], drawn.comb);
      if (Number.isFinite(flag.speed) && within(drawn.label.lat, drawn.label.lon, frame)) {
        notes.push({
          x: drawn.label.lon,
          y: drawn.label.lat,
          text: `${fixed(flag.speed, 0)} m/s`,
          textangle: drawn.label.angle,
          showarrow: false,
          font: { size: 12.5 * k, color: palette.ink },
          rim: palette.paper,
        });
      }
      continue;
    }
    if (!within(lat, lon, frame)) continue;
    const sign = { irregular: waves, slope: wedge, fault: brokenBar, front: wedge }[flag.kind] ?? brokenBar;
    const line = sign(lat, lon, size);
    append(loud, line);
    append(lines[flag.kind === "fault" ? "other" : tone], line);
  }
  // On the layer of states the ground already has the states' colours: there the signs are of ink.
  const { broken, strained } = palette.states;
  const colours =
    contents.layer === "state"
      ? { broken: palette.ink, strained: palette.ink, other: palette.ink }
      : { broken: broken.edge, strained: strained.edge, other: palette.ink };
  const common = { ...QUIET, type: "scatter", mode: "lines" };
  const traces = [{ ...common, name: "flag halo", ...loud, line: { color: withAlpha(palette.paper, 0.9), width: 6.5 * k, simplify: false } }];
  for (const tone of ["other", "strained", "broken"]) {
    traces.push({ ...common, name: `flags ${tone}`, ...lines[tone], line: { color: colours[tone], width: 2.6 * k, simplify: false } });
    traces.push({ ...common, name: `combs ${tone}`, ...combs[tone], line: { color: colours[tone], width: 1.7 * k, simplify: false } });
  }
  return { traces, notes };
}

function placeTraces(place, frame, palette) {
  const x = [];
  const y = [];
  if (place) {
    const [lat, lon] = place;
    const reach = widthKm(frame) / 40;
    for (const [e, n] of [[-1, 0], [1, 0], [0, -1], [0, 1]]) {
      const [la1, lo1] = offset(lat, lon, e * reach * 1.1, n * reach * 1.1);
      const [la2, lo2] = offset(lat, lon, e * reach * 2.1, n * reach * 2.1);
      x.push(lo1, lo2, null);
      y.push(la1, la2, null);
    }
  }
  const common = { ...QUIET, type: "scatter", mode: "lines", x, y };
  return [
    { ...common, name: "place halo", line: { color: palette.paper, width: 6 } },
    { ...common, name: "place", line: { color: palette.accent, width: 2.6 } },
  ];
}

/** Room around the chart on the screen, for its frame and its degrees. @param {number} width */
export function marginOf(width) {
  return width < 480 ? { l: 42, r: 8, t: 8, b: 28 } : { l: 54, r: 10, t: 10, b: 32 };
}

/**
 * Height of the chart on the screen that draws it true to shape.
 * @param {Frame} frame
 * @param {number} width
 */
export function heightOf(frame, width) {
  const { l, r, t, b } = marginOf(width);
  return Math.round((width - l - r) / aspectOf(frame)) + t + b;
}

/** @param {MapContents} contents */
function layoutOf(contents, palette) {
  const { frame, width = 700 } = contents;
  const printed = Boolean(contents.title);
  const small = width < 480;
  const lon = gradations(frame.west, frame.east, small ? 5 : 8);
  const lat = gradations(frame.south, frame.north, small ? 5 : 7);
  const decimals = (step) => (step >= 1 ? 0 : step >= 0.1 ? 1 : 2);
  const font = { family: "system-ui, -apple-system, Segoe UI, Roboto, Liberation Sans, sans-serif", size: small ? 11 : 12 * Math.min(1.25, sizeFactor(width)), color: palette.muted };
  const axis = {
    showgrid: true,
    gridcolor: withAlpha(palette.ink, 0.16),
    gridwidth: 0.7,
    layer: "above traces",
    zeroline: false,
    fixedrange: true,
    showline: true,
    mirror: true,
    linecolor: palette.ink,
    linewidth: 1,
    tickfont: font,
    ticks: "outside",
    ticklen: 9,
    tickcolor: "rgba(0,0,0,0)",
    ...(printed ? { constrain: "domain" } : {}),
  };
  return {
    paper_bgcolor: printed ? palette.paper : "rgba(0,0,0,0)",
    plot_bgcolor: palette.paper,
    margin: printed ? { l: 76, r: 40, t: 76, b: 96 } : marginOf(width),
    font: { ...font, color: palette.ink },
    showlegend: false,
    hovermode: false,
    dragmode: false,
    xaxis: {
      ...axis,
      range: [frame.west, frame.east],
      tickvals: lon.values,
      ticktext: lon.values.map((v) => lonText(v, decimals(lon.step))),
    },
    yaxis: {
      ...axis,
      range: [frame.south, frame.north],
      ...(printed ? { scaleanchor: "x", scaleratio: 1 / Math.cos((((frame.south + frame.north) / 2) * Math.PI) / 180) } : {}),
      tickvals: lat.values,
      ticktext: lat.values.map((v) => latText(v, decimals(lat.step))),
    },
    shapes: [...ladder(frame, lon, lat, palette), ...scaleBar(frame, palette, contents.sites)],
    annotations: [
      scaleBarNote(frame, palette, sizeFactor(width), contents.sites),
      ...(printed
        ? [
            { xref: "paper", yref: "paper", x: 0, y: 1, xanchor: "left", yanchor: "bottom", yshift: 16, align: "left", showarrow: false, text: contents.title, font: { size: 15, color: palette.ink } },
            { xref: "paper", yref: "paper", x: 0, y: 0, xanchor: "left", yanchor: "top", yshift: -34, align: "left", showarrow: false, text: contents.foot ?? "", font: { size: 11, color: palette.muted } },
          ]
        : []),
    ],
  };
}

/** The chart's border: bars of ink and paper by turns, one per gradation. */
function ladder(frame, lon, lat, palette) {
  const bars = [];
  const thick = 5;
  const cuts = (from, to, { step, values }) => {
    const half = step / 2;
    const all = [from, to];
    for (const v of [...values, values[0] - half, ...values.map((w) => w + half)]) if (v > from && v < to) all.push(v);
    return [...new Set(all.map((v) => Number(v.toFixed(6))))].sort((a, b) => a - b);
  };
  const push = (cut, half, horizontal) => {
    for (let i = 0; i + 1 < cut.length; i++) {
      // The turn is counted from a fixed meridian or parallel, so that opposite edges agree.
      const dark = Math.round(cut[i] / half - 0.5 + 1e-6) % 2 === 0;
      const fillcolor = dark ? palette.ink : palette.raised;
      const line = { color: palette.ink, width: 0.8 };
      for (const end of [0, 1]) {
        bars.push(
          horizontal
            ? { type: "rect", xref: "x", yref: "y domain", x0: cut[i], x1: cut[i + 1], ysizemode: "pixel", yanchor: end, y0: 0, y1: end ? thick : -thick, fillcolor, line, layer: "above" }
            : { type: "rect", xref: "x domain", yref: "y", y0: cut[i], y1: cut[i + 1], xsizemode: "pixel", xanchor: end, x0: 0, x1: end ? thick : -thick, fillcolor, line, layer: "above" },
        );
      }
    }
  };
  push(cuts(frame.west, frame.east, lon), lon.step / 2, true);
  push(cuts(frame.south, frame.north, lat), lat.step / 2, false);
  return bars;
}

/** Where the scale bar lies: below on the left, or in the next corner that no site and its name need. */
function scaleBarPlace(frame, sites = []) {
  const km = scaleBarKm(frame);
  const [high, wide] = [frame.north - frame.south, frame.east - frame.west];
  const long = offset(frame.south, 0, km, 0)[1];
  const corners = [[0.045, 0.04 * wide], [0.045, 0.96 * wide - long], [0.93, 0.04 * wide], [0.93, 0.96 * wide - long]]
    .map(([up, along]) => ({ km, lat: frame.south + up * high, lon: frame.west + along }));
  const crowded = ({ lat, lon }) => sites.some((site) =>
    Math.abs(site.lat - lat) < 0.12 * high && site.lon > lon - 0.2 * wide && site.lon < lon + long + 0.2 * wide);
  return corners.find((corner) => !crowded(corner)) ?? corners[0];
}

function scaleBar(frame, palette, sites) {
  const { km, lat, lon } = scaleBarPlace(frame, sites);
  return [0, 1].map((half) => ({
    type: "rect",
    xref: "x",
    yref: "y",
    x0: offset(lat, lon, (km / 2) * half, 0)[1],
    x1: offset(lat, lon, (km / 2) * (half + 1), 0)[1],
    ysizemode: "pixel",
    yanchor: lat,
    y0: 0,
    y1: 5,
    fillcolor: half ? palette.raised : palette.ink,
    line: { color: palette.ink, width: 1 },
    layer: "above",
  }));
}

function scaleBarNote(frame, palette, k, sites) {
  const { km, lat, lon } = scaleBarPlace(frame, sites);
  return {
    x: lon,
    y: lat,
    xanchor: "left",
    yanchor: "bottom",
    yshift: 5,
    xshift: -2,
    showarrow: false,
    text: `${km} km`,
    font: { size: 11 * k, color: palette.ink, shadow: halo(palette) },
  };
}

/** @param {"delay"|"uncertainty"|"slope"} layer */
function colourBar(layer, palette) {
  const { title, unit } = LAYER_WORDS[layer];
  return {
    title: { text: `${title}, ${unit}`, side: "right", font: { size: 12, color: palette.ink } },
    thickness: 12,
    outlinewidth: 0.8,
    outlinecolor: palette.ink,
    tickfont: { size: 11, color: palette.ink },
    x: 1.02,
  };
}
