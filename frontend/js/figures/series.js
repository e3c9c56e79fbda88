/**
 * The delay of one place over the day, with its band of uncertainty, as a plotly figure. Pure.
 */

import { PALETTES, roundEnd, withAlpha } from "../colour.js";
import { hourText } from "../words.js";

/** Room for the numbers of the delay, left of the time axis [pixels]. */
export const LEFT = 44;

/**
 * @param {object} contents
 * @param {{times: number[], delay: number[], sigma: number[], slope: number[]}} contents.series  m, m, mm/km
 * @param {number[]|null} [contents.other]  the delay of other days at the same times of day [m]
 * @param {[number, number]} contents.span  ends of the time axis, as on the strip
 * @param {import("../colour.js").Theme} contents.theme
 * @param {"utc"|"local"} contents.clock
 * @param {string} contents.zone
 * @param {number} contents.top  end of the delay axis [m]
 * @param {number} [contents.width]
 */
export function seriesFigure({ series, other = null, span, theme, clock, zone, top, width = 700 }) {
  const palette = PALETTES[theme];
  const x = series.times.map((ms) => new Date(ms).toISOString());
  const known = series.delay.map((v, i) => Number.isFinite(v) && Number.isFinite(series.sigma[i]));
  const upper = series.delay.map((v, i) => (known[i] ? v + series.sigma[i] : null));
  const lower = series.delay.map((v, i) => (known[i] ? Math.max(0, v - series.sigma[i]) : null));
  const quiet = { hoverinfo: "skip", showlegend: false, type: "scatter", mode: "lines" };
  const band = bandOutline(x, upper, lower);
  const hour = 3600000;
  const every = (width > 900 ? 2 : width > 460 ? 3 : 6) * hour;
  const ticks = [];
  for (let ms = Math.ceil((span[0] - 60000) / every) * every; ms <= span[1] + 60000; ms += every) ticks.push(ms);
  const highest = Math.max(top, ...upper.filter((v) => v !== null), ...(other ?? []).filter(Number.isFinite));
  const axisFont = { size: 11, color: palette.muted };
  return {
    data: [
      { ...quiet, name: "band", x: band.x, y: band.y, fill: "toself", fillcolor: withAlpha(palette.accent, 0.2), line: { width: 0 } },
      {
        ...quiet,
        name: "delay",
        x,
        y: series.delay.map((v) => (Number.isFinite(v) ? v : null)),
        line: { color: palette.accent, width: 1.8 },
        connectgaps: false,
      },
      ...(other ? [{ ...quiet, name: "other", x, y: other.map((v) => (Number.isFinite(v) ? v : null)), line: { color: palette.ink, width: 1.4, dash: "dash" }, connectgaps: false }] : []),
    ],
    layout: {
      paper_bgcolor: "rgba(0,0,0,0)",
      plot_bgcolor: "rgba(0,0,0,0)",
      margin: { l: LEFT, r: 0, t: 6, b: 22 },
      showlegend: false,
      hovermode: false,
      dragmode: false,
      font: { family: "system-ui, -apple-system, Segoe UI, Roboto, Liberation Sans, sans-serif", ...axisFont },
      xaxis: {
        type: "date",
        range: [new Date(span[0]).toISOString(), new Date(span[1]).toISOString()],
        tickvals: ticks.map((ms) => new Date(ms).toISOString()),
        ticktext: ticks.map((ms) => hourText(ms, clock === "local" ? zone : "UTC")),
        fixedrange: true,
        gridcolor: palette.hairline,
        zeroline: false,
        showline: true,
        linecolor: palette.edge,
        tickfont: axisFont,
      },
      yaxis: {
        range: [0, highest],
        dtick: roundEnd(highest / 5),
        fixedrange: true,
        gridcolor: palette.hairline,
        zeroline: false,
        ticksuffix: " m",
        tickfont: axisFont,
      },
    },
  };
}

/**
 * The band as closed outlines, one per unbroken run: a gap in the data stays a gap.
 * @param {string[]} x
 * @param {(number|null)[]} upper
 * @param {(number|null)[]} lower
 */
export function bandOutline(x, upper, lower) {
  /** @type {(string|null)[]} */ const outX = [];
  /** @type {(number|null)[]} */ const outY = [];
  let start = 0;
  while (start < x.length) {
    if (upper[start] === null) {
      start++;
      continue;
    }
    let end = start;
    while (end + 1 < x.length && upper[end + 1] !== null) end++;
    if (outX.length) {
      outX.push(null);
      outY.push(null);
    }
    for (let i = start; i <= end; i++) {
      outX.push(x[i]);
      outY.push(upper[i]);
    }
    for (let i = end; i >= start; i--) {
      outX.push(x[i]);
      outY.push(lower[i]);
    }
    start = end + 1;
  }
  return { x: outX, y: outY };
}
