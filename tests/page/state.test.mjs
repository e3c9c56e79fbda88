// The view and its URL: round trips, damaged links, the history.
import assert from "node:assert/strict";
import test from "node:test";
import { ASKS, clockText, firstView, fromQuery, LAYERS, SHOWABLE, State, toQuery, FIELD } from "../../frontend/js/state.js";

test("the first view has an empty query, and an empty query is the first view", () => {
  assert.equal(toQuery(firstView()), "");
  assert.deepEqual(fromQuery(""), firstView());
});

test("every view survives the way through its URL", () => {
  const views = [];
  for (const layer of LAYERS) {
    for (const clock of ["utc", "local"]) {
      for (let bits = 0; bits < 2 ** SHOWABLE.length; bits++) {
        views.push({
          region: "Strait of trials & more/less",
          day: "2031-05-11",
          minute: (bits * 97) % 1440,
          layer,
          clock,
          place: bits % 2 ? [-41.125, 147.5] : null,
          show: new Set(SHOWABLE.filter((_, i) => bits & (1 << i))),
          ask: ASKS[bits % ASKS.length],
          versus: ["", "quiet", "2031-05-10"][bits % 3],
          beside: bits % 5 < 3,
          who: bits % 2 ? "Gannet Field & more" : "",
          span: ["", "2031", "dec-feb"][(bits >> 1) % 3],
          worst: ["", "strained", "broken"][(bits >> 2) % 3],
          field: ["", ...FIELD][(bits >> 1) % 4],
          use: bits % 6 === 1 ? "RTK, 20 km" : "",
          files: bits % 7 === 3,
        });
      }
    }
  }
  for (const view of views) assert.deepEqual(fromQuery(toQuery(view)), view);
  assert.equal(new Set(views.map(toQuery)).size, views.length, "two views share a URL");
});

test("a damaged link opens at first values", () => {
  const view = fromQuery("?ask=why&versus=tomorrow&span=spring&worst=ever&field=corn&files=shut&day=yesterday&time=25:99&layer=rainbow&at=900,abc&clock=moon&show=dragons");
  assert.deepEqual(view, { ...firstView(), show: new Set() });
});

test("minutes as a clock", () => {
  assert.deepEqual([0, 875, 1439].map(clockText), ["00:00", "14:35", "23:59"]);
});

function world(search = "") {
  const calls = [];
  let heard = () => {};
  const location = { search };
  const history = {
    pushState: (_a, _b, url) => calls.push(["push", url]),
    replaceState: (_a, _b, url) => calls.push(["replace", url]),
  };
  let now = 0;
  const state = new State({ history, location, listen: (_type, f) => (heard = f), clock: () => now });
  return { calls, state, location, back: (query) => ((location.search = query), heard()), wait: (ms) => (now += ms) };
}

test("a run of moves in time is one step of the history; other changes are a step each", async () => {
  const { calls, state, wait } = world("?region=a&day=2031-05-11");
  state.change({ minute: 5 });
  wait(100);
  state.change({ minute: 10 });
  await new Promise((resolve) => setTimeout(resolve, 120));
  wait(5000);
  state.change({ minute: 15 });
  state.change({ layer: "slope" });
  state.change({ minute: 20 });
  assert.deepEqual(calls.map(([kind]) => kind), ["push", "replace", "push", "push", "push"]);
});

test("nothing is written or told when nothing changes", () => {
  const { calls, state } = world("?layer=slope&at=-40,146");
  let told = 0;
  state.addEventListener("change", () => told++);
  state.change({ layer: "slope", place: [-40, 146], show: new Set(["receivers", "sites", "veil"]) });
  assert.equal(told, 0);
  assert.equal(calls.length, 0);
});

test("going back tells exactly what differs", () => {
  const { state, back } = world("?region=a&day=2031-05-11&time=05:00");
  state.change({ layer: "state", minute: 330 });
  let names = null;
  state.addEventListener("change", (event) => (names = event.detail));
  back("?region=a&day=2031-05-11&time=05:00");
  assert.deepEqual([...names].sort(), ["layer", "minute"]);
  assert.equal(state.view.minute, 300);
});

test("a fast run waits to write its address, then writes where it ended", async () => {
  const { calls, state, wait } = world("?region=a&day=2031-05-11");
  for (let i = 0; i < 100; i++) {
    state.change({ minute: i });
    wait(5);
  }
  assert.equal(calls.length, 1, "within one turn of the browser only the first step is written");
  await new Promise((resolve) => setTimeout(resolve, 150));
  assert.equal(calls.length, 2);
  assert.deepEqual([calls[1][0], /time=01:39/.test(calls[1][1])], ["replace", true]);
});

test("a choice after a run first writes where the run ended, so that back leads there", async () => {
  const { calls, state, wait } = world("?region=a&day=2031-05-11");
  state.change({ minute: 1 });
  wait(5);
  state.change({ minute: 2 });
  state.change({ layer: "slope" });
  await new Promise((resolve) => setTimeout(resolve, 150));
  assert.deepEqual(calls.map(([kind]) => kind), ["push", "replace", "push"]);
  assert.match(calls[1][1], /time=00:02$/);
  assert.match(calls[2][1], /time=00:02&layer=slope/);
});
