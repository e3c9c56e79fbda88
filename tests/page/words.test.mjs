// Numbers, places, times and sentences as the page writes them.
import assert from "node:assert/strict";
import test from "node:test";
import * as words from "../../frontend/js/words.js";
import { degrees } from "../../frontend/js/panels/reading.js";

const MINUS = "\u2212";

test("a number carries its uncertainty, rounded alike", () => {
  assert.equal(words.withSigma(38.4, 6.2, "mm/km"), "38 ± 6 mm/km");
  assert.equal(words.withSigma(3.4261, 0.273, "m"), "3.4 ± 0.3 m");
  assert.equal(words.withSigma(3.4261, 0.0127, "m", 3), "3.426 ± 0.013 m");
  assert.equal(words.withSigma(-4.2, 1.2, "m"), `${MINUS}4.2 ± 1.2 m`);
});

test("what is not known is said, never shown as a number", () => {
  assert.equal(words.withSigma(NaN, 1, "m"), "not known");
  assert.match(words.withSigma(3.2, NaN, "m"), /uncertainty not known/);
  assert.equal(words.fixed(NaN, 1), "–");
});

test("a file's line says what it holds, of which receiver and day where it tells them", () => {
  const { holds } = words.FILE_WORDS;
  assert.equal(holds({ kind: "observations", marker: "ARDN", day: "2031-03-11" }), "observations of ARDN, Tue, 11 March 2031");
  assert.equal(holds({ kind: "observations", marker: "", day: "2031-03-11" }), "observations, Tue, 11 March 2031");
  assert.equal(holds({ kind: "biases", marker: "", day: "" }), "biases");
});

test("no minus before a zero", () => assert.equal(words.fixed(-0.004, 2), "0.00"));

test("places name their hemispheres", () => {
  assert.equal(words.placeText(-41.25, 146.5), "41.25° S, 146.50° E");
  assert.equal(words.placeText(12, -3.5, 1), "12.0° N, 3.5° W");
  assert.equal(words.lonText(190, 0), "170° W");
});

test("compass words for headings", () => {
  assert.deepEqual([0, 44, 91, 180, 225, 315, 359, 361].map(words.compass), ["north", "north-east", "east", "south", "south-west", "north-west", "north", "north"]);
});

test("times always name their clock, and epochs of GPS time are written to the nearest minute", () => {
  const ms = Date.UTC(2031, 4, 11, 5, 29, 42);
  assert.equal(words.timeText(ms), "05:30 UTC");
  assert.equal(words.timeText(ms, { clock: "local", zone: "Australia/Hobart" }), "15:30 Hobart time");
  assert.equal(words.bothClocks(ms, "Australia/Hobart"), "05:30 UTC · 15:30 Hobart time");
  assert.equal(words.bothClocks(Date.UTC(2031, 4, 11, 20), "Australia/Hobart"), "20:00 UTC · 06:00 Hobart time, 12 May 2031");
  assert.equal(words.bothClocks(ms, "UTC"), "05:30 UTC");
});

test("a zone this browser does not know falls back to UTC instead of failing", () => {
  assert.equal(words.hourText(Date.UTC(2031, 0, 1, 7), "Nowhere/Atall"), "07:00");
});

test("unseen has its own words, which promise nothing", () => {
  const sentence = words.siteSentence("Northport", "unseen", "");
  assert.match(sentence, /unseen/);
  assert.match(sentence, /not enough data/);
  assert.doesNotMatch(sentence, /hold/);
});

test("a reason is joined to its site without saying the state twice", () => {
  assert.equal(words.siteSentence("Northport", "broken", "broken: the delay changes by 40 mm per km"), "Northport: broken, the delay changes by 40 mm per km.");
  assert.equal(words.siteSentence("Northport", "holds", ""), "Northport: holds.");
});

test("flags in a line", () => {
  const flag = { kind: "front", slope: 95.2, sigma: 9.1, speed: 61.8, heading: 315 };
  assert.equal(words.flagSentence(flag), "Moving front, 95 ± 9 mm/km, moving north-west at 62 m/s");
  assert.match(words.flagSentence({ ...flag, sigma: 0.31 }), /95.2 ± 0.3 mm/, "a sigma is never read as nought");
  assert.equal(words.flagSentence({ ...flag, kind: "fault", slope: NaN, speed: NaN }), "Fault in the data");
});

test("degrees are read as people write them, and refused when they are not degrees", () => {
  for (const text of ["40.25 S", "40.25° S", "-40.25", `${MINUS}40.25`, "40,25 s"]) assert.equal(degrees(text, "S"), -40.25);
  assert.equal(degrees("146.5 E", "W"), 146.5);
  for (const text of ["", "north", "40.25 E", "1e3", "40 15 S"]) assert.ok(Number.isNaN(degrees(text, "S")), text);
});

test("the chosen clock comes first", () => {
  const ms = Date.UTC(2031, 4, 11, 5, 30);
  assert.equal(words.bothClocks(ms, "Australia/Hobart", "local"), "15:30 Hobart time · 05:30 UTC");
});

test("the limits are told with their units", () => {
  const said = words.limitsSentence({ strained_mm_per_km: 8, broken_mm_per_km: 30, unseen_sigma_m: 1.5 });
  assert.match(said, /strained from 8 mm\/km, broken from 30 mm\/km, unseen .* 1\.5 m, or where it cannot be said/);
});

test("that corrections hold is not said of every job", () => {
  const said = words.holdsSentence({ strained_mm_per_km: 8 });
  assert.match(said, /under 8 mm\/km \(95 %\), whatever the distance to the base/);
  assert.ok(said.includes(`“${words.PAGE_WORDS.forYourWorkHere}”`), "the panel is named as the page names it");
});

test("no hemisphere where there is none", () => {
  assert.equal(words.lonText(180, 0), "180°");
  assert.equal(words.lonText(0, 0), "0°");
  assert.equal(words.latText(0, 1), "0.0°");
});

test("reasons become sentences, long names are shortened", () => {
  assert.equal(words.asSentence("too few lines of sight"), "Too few lines of sight.");
  assert.equal(words.asSentence(" "), "");
  assert.equal(words.shortened("Very long named place number 4", 12), "Very long n…");
  assert.equal(words.shortened("Northport", 12), "Northport");
});

test("spans name their clock once; the end of the day is 24:00", () => {
  const at = (h, m) => Date.UTC(2031, 2, 12, h, m) - 18000;
  assert.equal(words.spanText(at(5, 20), at(8, 15)), "05:20 – 08:15 UTC");
  assert.equal(words.spanText(at(0, 0), at(24, 0)), "00:00 – 24:00 UTC");
  assert.equal(words.spanText(at(9, 30), at(9, 30)), "09:30 UTC");
  assert.equal(words.spanText(at(5, 20), at(8, 15), { clock: "local", zone: "Etc/GMT-10" }), "15:20 – 18:15 UTC+10");
});

test("zones named by hours alone turn their sign", () => {
  assert.equal(words.zoneName("Etc/GMT-10"), "UTC+10");
  assert.equal(words.zoneName("Etc/GMT+3"), `UTC${MINUS}3`);
  assert.equal(words.zoneName("Australia/Hobart"), "Hobart time");
});

test("evidence that stands alone says so once", () => {
  assert.equal(words.evidenceText({ evidence: "unconfirmed: one satellite", confirmed: false }), "Unconfirmed: one satellite.");
  assert.equal(words.evidenceText({ evidence: "only HULL sees it", confirmed: false }), "Not confirmed. Only HULL sees it.");
  assert.equal(words.evidenceText({ evidence: "three agree.", confirmed: true }), "Three agree.");
});
