/**
 * Curves of single lines of sight, one small chart per satellite, one line per receiver. Shapes in pixels. Pure.
 */

/** Dashes that tell lines apart without colour. */
export const DASHES = ["", "7 3", "2 3", "9 3 2 3", "4 4"];

/**
 * @param {object} contents
 * @param {import("../api.js").Sightline[]} contents.lines
 * @param {[number, number]} contents.span  ms UTC
 * @param {number} contents.width
 * @param {number} [contents.height]
 */
export function curvesFigure({ lines, span, width, height = 96 }) {
  const left = 34;
  const bottom = 16;
  /** @type {Map<string, import("../api.js").Sightline[]>} */
  const groups = new Map();
  for (const line of lines) groups.set(line.satellite, [...(groups.get(line.satellite) ?? []), line]);
  const x = (ms) => Number((left + ((ms - span[0]) / (span[1] - span[0])) * (width - left - 2)).toFixed(1));
  return {
    x,
    charts: [...groups].map(([satellite, members]) => {
      const values = members.flatMap((line) => line.delay.filter(Number.isFinite));
      const middle = (Math.min(...values) + Math.max(...values)) / 2;
      const half = Math.max(0.05, ((Math.max(...values) - Math.min(...values)) / 2) * 1.08);
      const [low, high] = [middle - half, middle + half];
      const y = (v) => Number((4 + ((high - v) / (high - low)) * (height - 8 - bottom)).toFixed(1));
      return {
        satellite,
        marks: [low + 0.1 * half, middle, high - 0.1 * half].map((value) => ({ y: y(value), text: value.toFixed(half > 1 ? 1 : 2) })),
        lines: members.map((line, i) => ({ line, dash: DASHES[i % DASHES.length], path: pathOf(line, x, y) })),
      };
    }),
  };
}

/** @param {import("../api.js").Sightline} line */
function pathOf({ times, delay }, x, y) {
  let pen = "M";
  let path = "";
  times.forEach((ms, i) => {
    if (!Number.isFinite(delay[i])) pen = "M";
    else {
      path += `${pen}${x(ms)} ${y(delay[i])}`;
      pen = "L";
    }
  });
  return path;
}
