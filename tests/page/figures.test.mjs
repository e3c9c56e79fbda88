// Figures are functions of data: read what they give.
import assert from "node:assert/strict";
import { readdirSync, readFileSync } from "node:fs";
import test from "node:test";
import { STATES } from "../../frontend/js/colour.js";
import { outline, rowsOf } from "../../frontend/js/figures/cells.js";
import { differenceMap, medianDelay, medianMap } from "../../frontend/js/figures/compare.js";
import { legendFigure } from "../../frontend/js/figures/legend.js";
import { aspectOf, bareWarnings, dottedNumbers, frameOf, heightOf, mapFigure } from "../../frontend/js/figures/map.js";
import { outlookFigure } from "../../frontend/js/figures/outlook.js";
import { bandOutline, seriesFigure } from "../../frontend/js/figures/series.js";
import { front, gradations, offset, placeAt, scaleBarKm, widthKm } from "../../frontend/js/figures/signs.js";
import { keyStep, nearest, runs, stripFigure } from "../../frontend/js/figures/strip.js";
import { freeSpot, projection } from "../../frontend/js/painting.js";
import { calendarText, csvText, mapRows, outlookRows } from "../../frontend/js/exporting.js";
import { WORDS } from "../../frontend/js/words.js";
import { chosenDays, fieldOf, yearFigure } from "../../frontend/js/figures/year.js";
import { unpack } from "../../frontend/js/api.js";

const DAY = Date.UTC(2031, 4, 11);
const MINUTE = 60000;
const TIMES = Array.from({ length: 288 }, (_, i) => DAY - 18000 + i * 5 * MINUTE);

/** Two times on a grid of 3 x 4; one cell unseen though it has a number, one without a number. */
function fixture() {
  const lats = Float64Array.from([-41, -40, -39]);
  const lons = Float64Array.from([144, 145, 146, 147]);
  const cells = 12;
  const delay = Float32Array.from({ length: 2 * cells }, (_, i) => 1 + i / 10);
  const state = Uint8Array.from({ length: 2 * cells }, (_, i) => [1, 1, 2, 3][i % 4]);
  state[0] = 0;
  delay[5] = NaN;
  state[5] = 0;
  const uncertainty = Float32Array.from({ length: 2 * cells }, () => 0.3);
  const slope = Float32Array.from({ length: 2 * cells }, () => 4);
  const support = Uint16Array.from({ length: 2 * cells }, (_, i) => (i % cells === 0 || i % cells === 5 ? 0 : 6));
  return { times: TIMES.slice(0, 2), lats, lons, layers: { delay, uncertainty, slope, support, state } };
}

const FLAG = {
  start: DAY, end: DAY + 60 * MINUTE, lat: -40, lon: 145.5, kind: "front", slope: 95, sigma: 9, speed: 62, heading: 0,
  state: "broken", evidence: "seen", confirmed: true,
  track: [{ time: DAY, lat: -41, lon: 145.5 }, { time: DAY + 60 * MINUTE, lat: -39, lon: 145.5 }],
};

function contents(more = {}) {
  const fields = fixture();
  return {
    frame: frameOf(fields), layer: "delay", theme: "day", time: TIMES[0], fields, index: 0,
    ends: { delay: [0, 10], uncertainty: [0, 1], slope: [0, 50] }, unseenSigma: 1.5, ...more,
  };
}

const named = (figure, name) => figure.data.find((trace) => trace.name === name);

test("figures and their floor touch neither document nor network", () => {
  const folder = new URL("../../frontend/js/figures/", import.meta.url);
  for (const name of readdirSync(folder)) {
    const text = readFileSync(new URL(name, folder), "utf8").replace(/\/\*[\s\S]*?\*\/|\/\/.*/g, "");
    assert.doesNotMatch(text, /\b(document|window|fetch|localStorage|Plotly)\b/, name);
    for (const [, from] of text.matchAll(/from "([^"]+)"/g)) {
      assert.match(from, /^(\.\.\/(colour|words)\.js|\.\/[a-z]+\.js)$/, `${name} imports ${from}`);
    }
  }
});

test("field cells are drawn as they are: no smoothing, scale ends of the day", () => {
  const cells = named(mapFigure(contents()), "delay");
  assert.equal(cells.type, "heatmap");
  assert.equal(cells.zsmooth, false);
  assert.deepEqual([cells.zmin, cells.zmax], [0, 10]);
  assert.deepEqual(cells.x, [144, 145, 146, 147]);
  assert.ok(Math.abs(cells.z[2][3] - 2.1) < 1e-6);
});

test("an unseen cell out of the network's sight shows no number, even where the archive has one, and is dotted on every layer", () => {
  for (const layer of ["delay", "uncertainty", "slope", "state"]) {
    const figure = mapFigure(contents({ layer }));
    const unseen = named(figure, "unseen");
    assert.equal(unseen.fillpattern.shape, ".");
    // Cells (0, 0) and (1, 1): their corners lie on the outline.
    assert.ok(unseen.x.includes(143.5) && unseen.y.includes(-41.5));
    assert.ok(unseen.x.includes(145.5) && unseen.y.includes(-39.5));
    if (layer !== "state") {
      assert.equal(named(figure, layer).z[0][0], null);
      assert.equal(named(figure, layer).z[1][1], null);
      assert.equal(named(figure, "dots").x.length, 0);
    }
  }
});

test("a known delay is shown under dots where it is unseen whether corrections hold; its slope and its state are not", () => {
  const fields = fixture();
  fields.layers.support[0] = 3; // cell (0, 0) is unseen, its delay known to 0.3 m
  for (const layer of ["delay", "uncertainty"]) {
    const figure = mapFigure(contents({ layer, fields }));
    assert.ok(Math.abs(named(figure, layer).z[0][0] - fields.layers[layer][0]) < 1e-6);
    assert.equal(areaOf(named(figure, "dots")), 1);
    assert.equal(areaOf(named(figure, "unseen")), 1);
    assert.match(named(figure, "dots").fillpattern.bgcolor, /^rgba\(.*,0\.25\)$/);
    assert.ok(dottedNumbers(contents({ layer, fields })));
  }
  assert.equal(named(mapFigure(contents({ layer: "slope", fields })), "slope").z[0][0], null);
  assert.equal(areaOf(named(mapFigure(contents({ layer: "state", fields })), "unseen")), 2);
  const [row] = mapRows(fields, 0, STATES, 1.5);
  assert.deepEqual([row[3] > 0, row[4] > 0, row[5], row[6]], [true, true, null, "unseen"]);
  // Known to 1.6 m only, where 1.5 m is needed: no number.
  fields.layers.uncertainty[0] = 1.6;
  assert.equal(named(mapFigure(contents({ fields })), "delay").z[0][0], null);
  assert.equal(mapRows(fields, 0, STATES, 1.5)[0][3], null);
  assert.equal(dottedNumbers(contents({ fields })), false);
});

test("a median tells what most tell, a difference what both tell", () => {
  const [a, b, c] = [fixture(), fixture(), fixture()];
  b.layers.delay.forEach((v, i, all) => { all[i] = v + 2; });
  c.layers.delay.forEach((v, i, all) => { all[i] = v + 9; });
  for (const one of [a, b, c]) one.layers.delay[5] = 4;
  a.layers.support[5] = b.layers.support[5] = 2; // unseen in all three, known in two; cell 0 is out of sight in all
  const middle = medianMap([a, b, c].map((fields) => ({ fields, index: 0 })), 1.5);
  assert.ok(Math.abs(middle.fields.layers.delay[1] - 3.1) < 1e-6);
  assert.equal(middle.fields.layers.state[5], 0);
  assert.equal(middle.fields.layers.delay[5], 4);
  assert.ok(Number.isNaN(middle.fields.layers.delay[0]));
  const less = differenceMap({ fields: b, index: 0 }, { fields: a, index: 0 }, 1.5);
  assert.ok(Math.abs(less.fields.layers.delay[1] - 2) < 1e-6);
  assert.equal(less.fields.layers.delay[5], 0);
  assert.ok(Number.isNaN(less.fields.layers.delay[0]) && Number.isNaN(less.fields.layers.slope[5]));
});

test("a median holds only where more than half of the maps hold, else it is the worst of them or unseen", () => {
  const stateOf = (/** @type {number[]} */ states) => medianMap(states.map((state) => {
    const fields = fixture();
    fields.layers.state[5] = state;
    return { fields, index: 0 };
  }), 1.5).fields.layers.state[5];
  const cases = [[1, 1, 3, 1], [1, 2, 3, 3], [3, 3, 1, 3], [2, 2, 2, 2], [1, 2, 2, 2], [1, 1, 0, 1], [1, 2, 0, 2], [1, 0, 0, 0], [3, 0, 0, 0]];
  for (const [a, b, c, expected] of cases) assert.equal(stateOf([a, b, c]), expected, `${a} ${b} ${c}`);
  assert.deepEqual([stateOf([1, 1, 2, 3]), stateOf([1, 1, 0, 0])], [3, 0], "just half is not more than half");
});

test("a warning over a cell without a number keeps its pattern; what holds without a number is dotted", () => {
  const fields = fixture();
  fields.layers.delay[6] = NaN; // strained
  fields.layers.delay[9] = NaN; // said to hold
  assert.deepEqual(bareWarnings(fields, 0, "delay"), ["strained"]);
  assert.deepEqual(bareWarnings(fields, 0, "slope"), []);
  assert.deepEqual(bareWarnings(fields, 0, "state"), []);
  const figure = mapFigure(contents({ fields }));
  assert.equal(named(figure, "strained").fillpattern.shape, "/");
  assert.equal(areaOf(named(figure, "strained")), 1);
  assert.equal(areaOf(named(figure, "unseen")), 3);
  assert.equal(named(figure, "broken"), undefined);
});

test("each state has its own colour and pattern, and the four share no cell", () => {
  const figure = mapFigure(contents({ layer: "state" }));
  const looks = STATES.map((state) => {
    const trace = named(figure, state);
    return JSON.stringify([trace.fillcolor, trace.fillpattern?.shape ?? ""]);
  });
  assert.equal(new Set(looks).size, 4);
  const area = STATES.reduce((sum, state) => sum + areaOf(named(figure, state)), 0);
  assert.ok(Math.abs(area - 12) < 1e-9, String(area));
});

/** Signed area of closed loops, holes counted away. */
function areaOf({ x, y }) {
  let area = 0;
  for (let i = 0; i + 1 < x.length; i++) if (x[i] !== null && x[i + 1] !== null) area += (x[i] * y[i + 1] - x[i + 1] * y[i]) / 2;
  return area;
}

test("outlines keep holes and corners that only touch", () => {
  const lats = [0, 1, 2];
  const lons = [0, 1, 2];
  const ring = outline((r, c) => !(r === 1 && c === 1), lats, lons);
  assert.equal(areaOf(ring), 8);
  assert.equal(ring.x.filter((v) => v === null).length, 1, "an outer loop and one hole");
  const touching = outline((r, c) => r === c, lats, lons);
  assert.equal(areaOf(touching), 3);
  assert.deepEqual(outline(() => false, lats, lons), { x: [], y: [] });
});

test("the veil hides only the unsure: clear where sigma is small, paper where it nears the limit", () => {
  const veil = named(mapFigure(contents({ veil: true })), "veil");
  assert.ok(Math.abs(veil.z[0][0] - 0.2) < 1e-6);
  assert.match(veil.colorscale[1][1], /,0\)$/);
  assert.equal(named(mapFigure(contents({ veil: true, layer: "slope" })), "veil"), undefined);
});

test("the chart is true to shape at its latitude", () => {
  const frame = { south: -43, north: -37, west: 142, east: 150 };
  assert.ok(Math.abs(aspectOf(frame) - (8 * Math.cos((40 * Math.PI) / 180)) / 6) < 1e-12);
  for (const width of [320, 700, 1500]) {
    const height = heightOf(frame, width);
    const { layout } = mapFigure(contents({ frame, width }));
    const p = projection(layout, width, height);
    const km = (x1, y1, x2, y2) => Math.hypot(p.x(x2) - p.x(x1), p.y(y2) - p.y(y1));
    const east = km(145, -40, 145 + 1 / Math.cos((40 * Math.PI) / 180), -40);
    const north = km(145, -40, 145, -39);
    assert.ok(Math.abs(east / north - 1) < 0.01, `${width}: ${east / north}`);
    assert.ok(Math.abs(p.lat(p.y(-41.3)) + 41.3) < 1e-9 && Math.abs(p.lon(p.x(144.7)) - 144.7) < 1e-9);
  }
});

test("a front is a stroke across its heading with a comb on the side it moves to", () => {
  const frame = { south: -50, north: -30, west: 130, east: 160 };
  for (const heading of [0, 45, 90, 200, 330]) {
    const drawn = front(-40, 145, heading, frame, 200);
    const h = (heading * Math.PI) / 180;
    for (let i = 0; i + 2 < drawn.comb.x.length; i += 3) {
      const east = (drawn.comb.x[i + 1] - drawn.comb.x[i]) * Math.cos((drawn.comb.y[i] * Math.PI) / 180);
      const north = drawn.comb.y[i + 1] - drawn.comb.y[i];
      const ahead = (east * Math.sin(h) + north * Math.cos(h)) / Math.hypot(east, north);
      assert.ok(ahead > 0.99, `heading ${heading}: ${ahead}`);
    }
    const middle = drawn.stroke.x.length >> 1;
    assert.ok(Math.abs(drawn.stroke.x[middle] - 145) < 1e-9 && Math.abs(drawn.stroke.y[middle] + 40) < 1e-9);
    assert.ok(drawn.label.angle > -90.01 && drawn.label.angle <= 90);
    const behind = (drawn.label.lat + 40) * Math.cos(h) + (drawn.label.lon - 145) * Math.cos((40 * Math.PI) / 180) * Math.sin(h);
    assert.ok(behind < 0, "the speed stands behind the front");
  }
});

test("a front follows its track, and its speed is written along it", () => {
  const half = mapFigure(contents({ flags: [FLAG], time: DAY + 30 * MINUTE }));
  assert.deepEqual(placeAt(FLAG, DAY + 30 * MINUTE), [-40, 145.5]);
  assert.deepEqual(placeAt(FLAG, DAY - MINUTE), [-41, 145.5]);
  assert.deepEqual(placeAt(FLAG, DAY + 90 * MINUTE), [-39, 145.5]);
  assert.equal(half.notes[0].text, "62 m/s");
  const stroke = named(half, "flags broken");
  assert.ok(stroke.y.filter((v) => v !== null).every((v) => Math.abs(v + 40) < 1e-9));
  assert.ok(named(half, "combs broken").x.length > 0);
});

test("every kind of flag has a sign of its own", () => {
  const drawn = ["slope", "irregular", "fault"].map((kind) => {
    const figure = mapFigure(contents({ flags: [{ ...FLAG, kind, track: [], state: "strained" }] }));
    return JSON.stringify(figure.data.filter((trace) => trace.name.startsWith("flags")).map((trace) => [trace.x, trace.y]).find(([x]) => x.length));
  });
  assert.equal(new Set(drawn).size, 3);
  assert.ok(drawn.every(Boolean));
});

test("a printed chart says what it is, in which unit, and the caution", () => {
  const figure = mapFigure(contents({ title: "Region, delay", foot: "Planning aid" }));
  const texts = figure.layout.annotations.map((note) => note.text);
  assert.ok(texts.includes("Region, delay") && texts.includes("Planning aid"));
  assert.equal(named(figure, "delay").showscale, true);
  assert.match(named(figure, "delay").colorbar.title.text, /, m$/);
});

test("no fields yet: the chart has coast and frame, and no cells", () => {
  const figure = mapFigure(contents({ fields: null, coast: [[[-40, 144], [-39, 145]]] }));
  assert.equal(named(figure, "delay"), undefined);
  assert.deepEqual(named(figure, "coast").x, [144, 145, null]);
});

test("runs of a strip cover the day without gap, and keep their reasons", () => {
  const codes = TIMES.map((_, i) => (i < 100 ? 1 : i < 110 ? 2 : i < 112 ? 3 : 0));
  const found = runs(codes, TIMES, codes.map((code) => (code === 3 ? "steep" : "")));
  assert.deepEqual(found.map((run) => run.state), ["holds", "strained", "broken", "unseen"]);
  assert.equal(found[2].reason, "steep");
  for (let i = 0; i + 1 < found.length; i++) assert.equal(found[i].to, found[i + 1].from);
  assert.equal(found.at(-1).to - found[0].from, 288 * 5 * MINUTE);
});

test("a code outside the four is unseen, never good", () => {
  assert.equal(runs([9, 9], TIMES.slice(0, 2))[0].state, "unseen");
});

test("keys: 5 minutes, an hour with shift, the day's ends, and no further", () => {
  const at = (key, shift, index) => keyStep(key, shift, index, TIMES);
  assert.equal(at("ArrowRight", false, 10), 11);
  assert.equal(at("ArrowLeft", false, 10), 9);
  assert.equal(at("ArrowRight", true, 10), 22);
  assert.equal(at("ArrowLeft", true, 10), 0);
  assert.equal(at("Home", false, 99), 0);
  assert.equal(at("End", false, 99), 287);
  assert.equal(at("ArrowRight", false, 287), 287);
  assert.equal(at("a", false, 10), null);
  const quarters = TIMES.filter((_, i) => i % 3 === 0);
  assert.equal(keyStep("ArrowRight", false, 0, quarters), 1, "coarser maps: one map a step");
  assert.equal(keyStep("ArrowRight", true, 0, quarters), 4);
});

test("the strip fits its width; flags that overlap get lanes of their own", () => {
  const rows = [{ name: "a", codes: TIMES.map(() => 1) }, { name: "b", codes: TIMES.map((_, i) => (i % 2 ? 2 : 1)) }];
  const figure = stripFigure({ rows, times: TIMES, flags: [FLAG, { ...FLAG, start: FLAG.start + 1 }], width: 640, rowHeight: 20, zone: "Australia/Hobart" });
  for (const row of [0, 1]) {
    const width = figure.bars.filter((bar) => bar.row === row).reduce((sum, bar) => sum + bar.width, 0);
    assert.ok(Math.abs(width - 640) < 2.9, String(width));
  }
  assert.notEqual(figure.marks[0].y, figure.marks[1].y);
  assert.equal(figure.ticks.length, 24);
  assert.deepEqual([figure.ticks[0].utc, figure.ticks[0].local], ["00:00", "10:00"]);
  assert.equal(nearest(TIMES, DAY + 5 * 60 * MINUTE), 60);
});

test("a band leaves gaps open and turns back along its lower edge", () => {
  const { x, y } = bandOutline(["a", "b", "c", "d"], [2, 3, null, 5], [1, 1, null, 4]);
  assert.deepEqual(x, ["a", "b", "b", "a", null, "d", "d"]);
  assert.deepEqual(y, [2, 3, 1, 1, null, 5, 4]);
});

test("the series has no line where nothing is known, and never below zero", () => {
  const series = { times: TIMES.slice(0, 3), delay: [1, NaN, 0.1], sigma: [0.2, NaN, 0.3], slope: [1, 1, 1] };
  const figure = seriesFigure({ series, span: [TIMES[0], TIMES[2]], theme: "day", clock: "utc", zone: "UTC", top: 10 });
  assert.deepEqual(named(figure, "delay").y, [1, null, 0.1]);
  assert.equal(named(figure, "delay").connectgaps, false);
  assert.equal(named(figure, "other"), undefined);
  const beside = seriesFigure({ series, other: [2, NaN, 12], span: [TIMES[0], TIMES[2]], theme: "day", clock: "utc", zone: "UTC", top: 10 });
  assert.deepEqual(named(beside, "other").y, [2, null, 12]);
  assert.equal(beside.layout.yaxis.range[1], 12);
  assert.ok(named(figure, "band").y.every((v) => v === null || v >= 0));
});

test("the delay of other days at the same times of day: their median, where most tell one", () => {
  const own = [DAY, DAY + 30 * MINUTE, DAY + 300 * MINUTE];
  const shifts = [-1, -2, -3].map((days) => days * 86400000);
  const others = [[1, 5], [2, NaN], [9, NaN]].map((delay, i) => ({ times: own.slice(0, 2).map((ms) => ms + shifts[i] + 4 * MINUTE), delay }));
  assert.deepEqual(medianDelay(others, shifts, own), [2, NaN, NaN]);
});

test("days of the year by season, state, site and magnetic field", () => {
  const entry = (day, kp, broken, siteBroken = 0) => ({ day, kp, ap: 1, slope: 12, flags: 0, shares: { holds: 1 - broken, broken }, siteShares: { Port: { holds: 1, broken: siteBroken } } });
  const all = [entry("2031-01-05", 2, 0), entry("2031-03-12", 7.33, 0.1, 0.2), entry("2031-07-01", 4.33, 0), entry("2032-01-02", NaN, 0.1)];
  const days = (wish, who = "") => chosenDays(all, { span: "", worst: "", field: "", ...wish }, who).map(({ day }) => day.slice(2));
  assert.deepEqual([2, 3.67, 4.33, 4.67, NaN].map(fieldOf), ["quiet", "disturbed", "disturbed", "storm", ""]);
  assert.deepEqual(days({ field: "storm" }), ["31-03-12"]);
  assert.deepEqual(days({ field: "quiet" }), ["31-01-05"]);
  assert.deepEqual(days({ span: "dec-feb" }), ["31-01-05", "32-01-02"]);
  assert.deepEqual(days({ span: "2031", worst: "broken" }), ["31-03-12"]);
  assert.deepEqual(days({ worst: "broken" }, "Port"), ["31-03-12"]);
});

test("a day that held as far as it was seen shows how much of it was not", () => {
  const entry = (day, shares) => ({ day, kp: NaN, ap: NaN, slope: 2, flags: 0, shares, siteShares: { Port: shares } });
  const entries = [entry("2031-01-05", { holds: 0.75, unseen: 0.25 }), entry("2031-01-06", { holds: 0.4, unseen: 0.6 }), entry("2031-01-07", undefined)];
  for (const who of ["", "Port"]) {
    const { columns } = yearFigure({ entries, who, width: 300 });
    assert.deepEqual(columns.map(({ state, unseen }) => [state, unseen]), [["holds", 0.25], ["unseen", 0.6], ["unseen", 1]]);
  }
});

test("the outlook as shapes: bands inside each other, chances that stand on each other, hours of the zone", () => {
  const hours = Array.from({ length: 48 }, (_, i) => DAY + i * 60 * MINUTE);
  const delay = hours.map((_, i) => (i === 5 ? NaN : 2));
  const range = (half) => ({ low: delay.map((v) => v - half), high: delay.map((v) => v + half) });
  const outlook = { hours, delay, ranges: { 50: range(0.2), 95: range(1) }, strained: hours.map(() => 0.5), broken: hours.map(() => 0.25) };
  const figure = outlookFigure({ outlook, width: 800, zone: "Etc/GMT-10" });
  assert.equal(figure.top, 3);
  assert.deepEqual(figure.bands.map((one) => one.share), ["95", "50"]);
  assert.equal(figure.bands[0].path.match(/M/g).length, 2); // the hour without a number parts it
  assert.equal(figure.line.match(/M/g).length, 2);
  const [column] = figure.columns;
  assert.equal(column.strained.tall, column.broken.tall);
  assert.equal(column.strained.y + column.strained.tall, column.broken.y);
  assert.equal(column.broken.y + column.broken.tall, figure.base);
  assert.equal(figure.ticks[0].text, "12:00"); // the first third hour of the zone after 10:00
  assert.deepEqual(figure.ticks.filter((tick) => tick.day).map((tick) => tick.text), ["00:00", "00:00"]);
});

test("a chance that is not known is no zero: dotted over the whole scale, an empty cell in the file", () => {
  const hours = [DAY, DAY + 60 * MINUTE, DAY + 120 * MINUTE];
  const outlook = { hours, delay: [2, 2, 2], ranges: {}, strained: [NaN, 0, 0.5], broken: [NaN, 0, NaN], slope: [1, 1, 1], phase: ["untold", "untold", "untold"] };
  const { columns, base } = outlookFigure({ outlook, width: 800, zone: "UTC", chanceHeight: 64 });
  for (const i of [0, 2]) {
    assert.deepEqual(columns[i].unknown, { y: base - 64, tall: 64 });
    assert.deepEqual([columns[i].strained, columns[i].broken], [null, null]);
  }
  assert.equal(columns[1].unknown, null);
  assert.deepEqual([columns[1].strained.tall, columns[1].broken.tall], [0, 0]);
  assert.match(csvText(["head"], outlookRows(outlook).slice(0, 1)), /,1,,,untold\n$/);
  assert.equal(WORDS.chances(NaN, NaN), "chances not known");
  assert.equal(WORDS.chances(0.5, 0.25), "chance of strained 50 %, of broken 25 %");
});

test("a calendar of spans: folded, escaped, in UTC", () => {
  const text = calendarText([{ start: DAY - 18000, end: DAY + 3600000, summary: "Port, north; ä".repeat(9), about: "a\nb" }], DAY);
  assert.ok(text.split("\r\n").every((line) => new TextEncoder().encode(line).length <= 75));
  const plain = text.replaceAll("\r\n ", "");
  assert.match(plain, /DTSTART:20310511T000000Z\r\nDTEND:20310511T010000Z/);
  assert.ok(plain.includes("Port\\, north\\; ä") && plain.includes("DESCRIPTION:a\\nb"));
  assert.equal(plain.match(/\r\n/g).length, text.split(/\r\n(?! )/).length - 1);
});

test("legend marks run from end to end", () => {
  const { marks, colours } = legendFigure("delay", [0, 10], "day");
  assert.deepEqual(marks.map((mark) => mark.text), ["0", "2", "4", "6", "8", "10"]);
  assert.deepEqual([marks[0].part, marks.at(-1).part], [0, 1]);
  assert.equal(colours.length, 7);
  const texts = (end) => legendFigure("delay", [0, end], "day").marks.map((mark) => mark.text).join(" ");
  assert.equal(texts(20), "0 5 10 15 20");
  assert.equal(texts(0.5), "0.0 0.1 0.2 0.3 0.4 0.5");
  assert.equal(texts(30), "0 10 20 30");
  assert.equal(texts(0.05), "0.00 0.01 0.02 0.03 0.04 0.05");
});

test("the scale bar goes to a corner that no site and its name need", () => {
  const bars = (sites) => mapFigure(contents({ sites })).layout.annotations.filter((note) => / km$/.test(note.text ?? ""));
  const { south, north, west, east } = contents().frame;
  const [usual] = bars([]);
  const [moved] = bars([{ name: "Corner field", lat: usual.y + 0.02 * (north - south), lon: usual.x }]);
  assert.ok(usual.x < west + 0.1 * (east - west) && usual.y < south + 0.1 * (north - south));
  assert.ok(moved.x > west + 0.5 * (east - west) && moved.y === usual.y);
});

test("gradations are round and few; the scale bar is a round length", () => {
  assert.deepEqual(gradations(141.75, 150.25, 8), { step: 2, values: [142, 144, 146, 148, 150] });
  assert.ok(gradations(0, 359, 6).values.length <= 6);
  const km = scaleBarKm({ south: -43, north: -37, west: 142, east: 150 });
  assert.ok([1, 2, 5].includes(km / 10 ** Math.floor(Math.log10(km))));
});

test("kilometres to degrees: a degree of latitude is 111.2 km, of longitude less by the cosine", () => {
  const [lat, lon] = offset(-60, 10, 55.6, 111.2);
  assert.ok(Math.abs(lat + 59) < 1e-9 && Math.abs(lon - 11) < 1e-9);
  assert.ok(Math.abs(widthKm({ south: -61, north: -59, west: 0, east: 1 }) - 55.6) < 1e-9);
});

test("arrays as the service packs them: little-endian, whatever the machine", () => {
  const floats = unpack({ dtype: "float32", base64: Buffer.from(Uint8Array.from([0, 0, 128, 63, 0, 0, 192, 127])).toString("base64") });
  assert.equal(floats[0], 1);
  assert.ok(Number.isNaN(floats[1]));
  assert.deepEqual([...unpack({ dtype: "uint16", base64: Buffer.from([1, 2]).toString("base64") })], [513]);
  assert.deepEqual([...unpack({ dtype: "uint8", base64: "AAECAw==" })], [0, 1, 2, 3]);
});

test("rows of a layer are taken at the time asked for", () => {
  const { lats, lons, layers } = fixture();
  assert.ok(Math.abs(rowsOf(layers.delay, 1, lats.length, lons.length)[0][0] - 2.2) < 1e-6);
});

test("names find a free spot beside their sign, or are left out", () => {
  const p = { left: 0, right: 200, top: 0, bottom: 100 };
  const below = freeSpot(40, 10, 100, 50, p, []);
  assert.ok(below.top > 50 && (below.left + below.right) / 2 === 100);
  const above = freeSpot(40, 10, 100, 50, p, [below]);
  assert.ok(above.bottom < 50);
  const right = freeSpot(40, 10, 100, 50, p, [below, above]);
  assert.ok(right.left > 100);
  const left = freeSpot(40, 10, 100, 50, p, [below, above, right]);
  assert.ok(left.right < 100);
  assert.equal(freeSpot(40, 10, 100, 50, p, [below, above, right, left]), null);
  assert.ok(freeSpot(40, 10, 198, 50, p, []).right <= 200, "inside the frame");
});

test("a receiver without data is an empty ring", () => {
  const receivers = [{ name: "A", lat: -40, lon: 145, fresh: true }, { name: "B", lat: -39, lon: 146, fresh: false }];
  const figure = mapFigure(contents({ receivers }));
  assert.deepEqual(named(figure, "receivers").x, [145, 146]);
  assert.deepEqual(named(figure, "receivers with data").x, [145]);
});
