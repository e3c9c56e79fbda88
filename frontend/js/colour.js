/**
 * Colours and scales of every figure: the same on map, legend, strip and export.
 * Never touches the document; style/tokens.css holds the same values for the page itself.
 */

/**
 * @typedef {"day"|"night"} Theme
 * @typedef {"unseen"|"holds"|"strained"|"broken"} StateName
 * @typedef {{paper: string, raised: string, sunk: string, ink: string, muted: string, hairline: string, edge: string,
 *   accent: string, states: Record<StateName, {fill: string, edge: string, line: string}>}} Palette
 */

/** Order of the codes 0 to 3 that the archive stores. @type {StateName[]} */
export const STATES = ["unseen", "holds", "strained", "broken"];

/** @type {Record<Theme, Palette>} */
export const PALETTES = {
  day: {
    paper: "#fbf8f1",
    raised: "#fffdf8",
    sunk: "#f3eee2",
    ink: "#1f2430",
    muted: "#5a6070",
    hairline: "#d9d1bf",
    edge: "#8a8270",
    accent: "#0f5c6e",
    states: {
      unseen: { fill: "#fbf8f1", edge: "#5a6070", line: "#5a6070" },
      holds: { fill: "#cfe3dc", edge: "#4c7a6c", line: "#cfe3dc" },
      strained: { fill: "#e2a63b", edge: "#8a5a00", line: "#8a5a00" },
      broken: { fill: "#9c1b57", edge: "#9c1b57", line: "#fbf8f1" },
    },
  },
  night: {
    paper: "#12161f",
    raised: "#181d28",
    sunk: "#0d1017",
    ink: "#ece7da",
    muted: "#a7adba",
    hairline: "#2e3544",
    edge: "#7b8394",
    accent: "#7cc4cf",
    states: {
      unseen: { fill: "#12161f", edge: "#a7adba", line: "#a7adba" },
      holds: { fill: "#24443f", edge: "#7fb3a5", line: "#24443f" },
      strained: { fill: "#b9832a", edge: "#e8b75a", line: "#12161f" },
      broken: { fill: "#e0679f", edge: "#e0679f", line: "#12161f" },
    },
  },
};

const DELAY = ["#f7f0e0", "#cfe0cf", "#8fbfb4", "#4f96a0", "#256a87", "#1c4169", "#161e3f"];
const SLOPE = ["#f7f0e0", "#f0d49b", "#e0a458", "#c56a35", "#9a3a35", "#661a3c", "#33102f"];
const UNCERTAINTY = ["#f7f0e0", "#e3dccb", "#c6c0b6", "#a29ea0", "#7c7b87", "#55586b", "#2e3549"];

const DIFFERENCE = {
  day: ["#14485a", "#4f8c9b", "#aac9c9", "#f7f0e0", "#e3b9a0", "#b9695c", "#742b3c"],
  night: ["#a6d4dd", "#5b9aa9", "#2b5a67", "#1a1e28", "#63333c", "#b9695c", "#f2c0ae"],
};

/**
 * The colours of a layer from its low end to its high end. By day more is darker, by night more is lighter, so that
 * the ground always means "little".
 * @param {"delay"|"uncertainty"|"slope"|"difference"} layer
 * @param {Theme} theme
 * @returns {string[]}
 */
export function ramp(layer, theme) {
  if (layer === "difference") return DIFFERENCE[theme];
  const colours = { delay: DELAY, uncertainty: UNCERTAINTY, slope: SLOPE }[layer];
  return theme === "night" ? [...colours].reverse() : colours;
}

/**
 * A ramp as plotly wants it: pairs of position and colour.
 * @param {string[]} colours
 * @returns {[number, string][]}
 */
export function scale(colours) {
  return colours.map((colour, i) => [i / (colours.length - 1), colour]);
}

/**
 * @param {string} hex  "#rrggbb"
 * @returns {[number, number, number]}  0 to 255
 */
export function channels(hex) {
  return [1, 3, 5].map((at) => parseInt(hex.slice(at, at + 2), 16));
}

/**
 * @param {string} hex
 * @param {number} alpha  0 to 1
 */
export function withAlpha(hex, alpha) {
  return `rgba(${channels(hex).join(",")},${alpha})`;
}

/**
 * Relative luminance, 0 black to 1 white. WCAG 2.2, definition "relative luminance".
 * @param {string} hex
 */
export function luminance(hex) {
  const [r, g, b] = channels(hex).map((value) => {
    const c = value / 255;
    return c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
  });
  return 0.2126 * r + 0.7152 * g + 0.0722 * b;
}

/**
 * Contrast of two colours, 1 to 21. WCAG 2.2, definition "contrast ratio".
 * @param {string} a
 * @param {string} b
 */
export function contrast(a, b) {
  const [light, dark] = [luminance(a), luminance(b)].sort((x, y) => y - x);
  return (light + 0.05) / (dark + 0.05);
}

/**
 * A round scale end at or above a value, so that legends carry plain numbers.
 * @param {number} value
 */
export function roundEnd(value) {
  if (!(value > 0)) return 1;
  const power = 10 ** Math.floor(Math.log10(value));
  const step = [1, 1.5, 2, 2.5, 3, 4, 5, 6, 8, 10].find((s) => s * power >= value * 0.9999);
  return Number(((step ?? 10) * power).toPrecision(3));
}
