/**
 * The legend of a layer: its colours and the numbers beside them. Pure.
 */

import { ramp } from "../colour.js";
import { fixed } from "../words.js";

/**
 * @param {"delay"|"uncertainty"|"slope"} layer
 * @param {[number, number]} ends
 * @param {import("../colour.js").Theme} theme
 * @returns {{colours: string[], marks: {part: number, text: string}[]}}  part: 0 low end, 1 high end
 */
export function legendFigure(layer, ends, theme) {
  const span = ends[1] - ends[0];
  const count = 4;
  const step = span / count;
  const decimals = Number.isInteger(step) ? 0 : step >= 0.1 && Number.isInteger(Math.round(step * 1e6) / 1e5) ? 1 : 2;
  const marks = Array.from({ length: count + 1 }, (_, i) => ({
    part: i / count,
    text: fixed(ends[0] + (span * i) / count, decimals),
  }));
  return { colours: ramp(layer, theme), marks };
}
