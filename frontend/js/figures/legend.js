/**
 * The legend of a layer: its colours and the numbers beside them. Pure.
 */

import { ramp } from "../colour.js";
import { fixed } from "../words.js";

/**
 * @param {"delay"|"uncertainty"|"slope"} layer
 * @param {[number, number]} ends
 * @param {import("../colour.js").Theme} theme
 * @param {boolean} [difference]  the layer of one day less another
 * @returns {{colours: string[], marks: {part: number, text: string}[]}}  part: 0 low end, 1 high end
 */
export function legendFigure(layer, ends, theme, difference = false) {
  const span = ends[1] - ends[0];
  // The count of steps that makes each a plain number: 1, 2 or 5 times a power of ten.
  const plain = (step) => [1, 2, 5].some((s) => Math.abs(step / 10 ** Math.floor(Math.log10(step) + 1e-9) - s) < 1e-6);
  const count = (difference ? [4, 2, 6] : [4, 5, 3, 6]).find((n) => plain(span / n)) ?? 4;
  const step = span / count;
  const decimals = Math.max(0, Math.min(3, -Math.floor(Math.log10(step) + 1e-9) + (plain(step) ? 0 : 1)));
  const marks = Array.from({ length: count + 1 }, (_, i) => ({
    part: i / count,
    text: fixed(ends[0] + (span * i) / count, decimals),
  }));
  return { colours: ramp(difference ? "difference" : layer, theme), marks };
}
