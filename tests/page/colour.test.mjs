// Colours: the style sheet and the figures agree, and every pair that carries meaning has the contrast it needs.
import assert from "node:assert/strict";
import { readFileSync } from "node:fs";
import test from "node:test";
import { contrast, luminance, PALETTES, ramp, roundEnd, scale, STATES } from "../../frontend/js/colour.js";

const css = readFileSync(new URL("../../frontend/style/tokens.css", import.meta.url), "utf8");

function tokens(theme) {
  const start = theme === "day" ? css.indexOf(":root {") : css.indexOf(':root[data-theme="night"]');
  const block = css.slice(css.indexOf("{", start) + 1, css.indexOf("}", start));
  return Object.fromEntries([...block.matchAll(/--([a-z-]+):\s*(#[0-9a-f]{6})/g)].map((m) => [m[1], m[2]]));
}

test("contrast of black and white is 21, of a colour with itself 1 (WCAG 2.2, contrast ratio)", () => {
  assert.ok(Math.abs(contrast("#000000", "#ffffff") - 21) < 1e-9);
  assert.equal(contrast("#0f5c6e", "#0f5c6e"), 1);
  // The mid grey commonly quoted as the lightest that still reaches 4.5 on white.
  assert.ok(Math.abs(contrast("#767676", "#ffffff") - 4.54) < 0.01);
});

for (const theme of ["day", "night"]) {
  const t = tokens(theme);
  const palette = PALETTES[theme];

  test(`${theme}: style sheet and figures use the same colours`, () => {
    const pairs = { paper: "paper", "paper-raised": "raised", "paper-sunk": "sunk", ink: "ink", muted: "muted", hairline: "hairline", edge: "edge", accent: "accent" };
    for (const [token, name] of Object.entries(pairs)) assert.equal(palette[name], t[token], token);
    for (const state of STATES) {
      assert.equal(palette.states[state].fill, t[state], state);
      assert.equal(palette.states[state].edge, t[`${state}-edge`], `${state} edge`);
    }
  });

  test(`${theme}: text reaches 4.5 on every ground it stands on (WCAG 2.2, 1.4.3)`, () => {
    for (const ground of ["paper", "paper-raised", "paper-sunk"]) {
      for (const text of ["ink", "muted", "accent", "broken"]) {
        assert.ok(contrast(t[text], t[ground]) >= 4.5, `${text} on ${ground}: ${contrast(t[text], t[ground]).toFixed(2)}`);
      }
    }
    assert.ok(contrast(t["on-accent"], t.accent) >= 4.5);
  });

  test(`${theme}: edges of controls and of states reach 3 on paper (WCAG 2.2, 1.4.11)`, () => {
    for (const edge of ["edge", "holds-edge", "strained-edge", "broken-edge", "unseen-edge"]) {
      assert.ok(contrast(t[edge], t.paper) >= 3, `${edge}: ${contrast(t[edge], t.paper).toFixed(2)}`);
    }
  });

  test(`${theme}: patterns stand out from their own ground`, () => {
    for (const state of ["strained", "broken", "unseen"]) {
      const { fill, line } = palette.states[state];
      assert.ok(contrast(fill, line) >= 2.4, `${state}: ${contrast(fill, line).toFixed(2)}`);
    }
  });

  test(`${theme}: ramps rise or fall evenly in lightness, from the ground outward`, () => {
    for (const layer of ["delay", "uncertainty", "slope"]) {
      const light = ramp(layer, theme).map((colour) => Math.cbrt(luminance(colour)));
      const steps = light.slice(1).map((v, i) => v - light[i]);
      assert.ok(steps.every((s) => Math.sign(s) === Math.sign(steps[0]) && Math.abs(s) > 0.02), `${layer}: ${steps}`);
      assert.ok(Math.abs(light[0] - Math.cbrt(luminance(palette.paper))) < Math.abs(light.at(-1) - Math.cbrt(luminance(palette.paper))));
    }
  });
}

test("the states differ in lightness or pattern: unseen is never the colour of holds", () => {
  for (const theme of ["day", "night"]) {
    assert.notEqual(PALETTES[theme].states.unseen.fill, PALETTES[theme].states.holds.fill);
    assert.equal(PALETTES[theme].states.unseen.fill, PALETTES[theme].paper);
  }
});

test("a scale runs from 0 to 1", () => {
  const made = scale(["#000000", "#777777", "#ffffff"]);
  assert.deepEqual(made.map(([part]) => part), [0, 0.5, 1]);
});

test("scale ends are round and never below the value", () => {
  for (const value of [0.03, 0.9, 1, 1.01, 7.2, 38, 96, 101, 412]) {
    assert.ok(roundEnd(value) >= value * 0.9999 && roundEnd(value) <= value * 1.7, String(value));
  }
  assert.equal(roundEnd(NaN), 1);
});
