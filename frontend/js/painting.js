/**
 * Paints a map figure's traces on a canvas: cells, outlines with patterns, lines, markers, words.
 *
 * plotly.js redraws a whole figure when a heatmap changes, which is too slow for moving through a day; it draws the
 * axes and the frame, and the pictures to take away, from the same figures. Knows only the kinds of trace that
 * figures/map.js makes.
 */

/** @typedef {{width: number, height: number, left: number, top: number, right: number, bottom: number, x: (lon: number) => number, y: (lat: number) => number, lon: (x: number) => number, lat: (y: number) => number}} Projection */

/**
 * Where degrees lie on the element, in pixels: the same as plotly's axes, which are linear and fill its margins.
 * @param {{margin: {l: number, r: number, t: number, b: number}, xaxis: {range: number[]}, yaxis: {range: number[]}}} layout
 * @param {number} width
 * @param {number} height
 * @returns {Projection}
 */
export function projection({ margin, xaxis, yaxis }, width, height) {
  const [west, east] = xaxis.range;
  const [south, north] = yaxis.range;
  const across = width - margin.l - margin.r;
  const down = height - margin.t - margin.b;
  return {
    width,
    height,
    left: margin.l,
    top: margin.t,
    right: margin.l + across,
    bottom: margin.t + down,
    x: (lon) => margin.l + ((lon - west) / (east - west)) * across,
    y: (lat) => margin.t + ((north - lat) / (north - south)) * down,
    lon: (x) => west + ((x - margin.l) / across) * (east - west),
    lat: (y) => north - ((y - margin.t) / down) * (north - south),
  };
}

/**
 * @param {HTMLCanvasElement} canvas
 * @param {{data: any[], layout: any}} figure
 * @param {Projection} p
 */
export function paint(canvas, figure, p) {
  const ratio = window.devicePixelRatio || 1;
  const [wide, high] = [Math.round(p.width * ratio), Math.round(p.height * ratio)];
  if (canvas.width !== wide || canvas.height !== high) {
    canvas.width = wide;
    canvas.height = high;
  }
  const ctx = /** @type {CanvasRenderingContext2D} */ (canvas.getContext("2d"));
  ctx.setTransform(ratio, 0, 0, ratio, 0, 0);
  ctx.clearRect(0, 0, p.width, p.height);
  ctx.save();
  ctx.beginPath();
  ctx.rect(p.left, p.top, p.right - p.left, p.bottom - p.top);
  ctx.clip();
  ctx.fillStyle = figure.layout.plot_bgcolor;
  ctx.fillRect(p.left, p.top, p.right - p.left, p.bottom - p.top);
  ctx.lineJoin = "round";
  ctx.lineCap = "round";
  const family = figure.layout.font.family;
  for (const trace of figure.data) {
    if (trace.type === "heatmap") cells(ctx, trace, p, ratio);
    else {
      if (trace.fill === "toself" || trace.mode.includes("lines")) lines(ctx, trace, p, ratio);
      if (trace.mode.includes("markers")) markers(ctx, trace, p);
      if (trace.mode.includes("text")) words(ctx, trace, p, family, figure.notes ?? []);
    }
  }
  for (const note of figure.notes ?? []) turned(ctx, note, p, family);
  ctx.restore();
}

/** Colours of a scale in 256 steps. @type {Map<string, string[]>} */
const tables = new Map();

function table(scale) {
  const key = JSON.stringify(scale);
  let found = tables.get(key);
  if (!found) {
    const stops = scale.map(([part, colour]) => ({ part, rgba: rgbaOf(colour) }));
    found = Array.from({ length: 256 }, (_, i) => {
      const part = i / 255;
      const after = Math.max(1, stops.findIndex((stop) => stop.part >= part - 1e-9));
      const [a, b] = [stops[after - 1], stops[after]];
      const t = Math.min(1, Math.max(0, (part - a.part) / (b.part - a.part)));
      const mix = a.rgba.map((v, k) => v + t * (b.rgba[k] - v));
      return `rgba(${Math.round(mix[0])},${Math.round(mix[1])},${Math.round(mix[2])},${mix[3].toFixed(3)})`;
    });
    tables.set(key, found);
  }
  return found;
}

/** @param {string} colour  "#rrggbb" or "rgba(r,g,b,a)" @returns {number[]} */
function rgbaOf(colour) {
  if (colour.startsWith("#")) return [1, 3, 5].map((at) => parseInt(colour.slice(at, at + 2), 16)).concat(1);
  return colour.slice(colour.indexOf("(") + 1, -1).split(",").map(Number);
}

function cells(ctx, trace, p, ratio) {
  const { x, y, z, zmin, zmax } = trace;
  const colours = table(trace.colorscale);
  const [halfX, halfY] = [x.length > 1 ? (x[1] - x[0]) / 2 : 0.5, y.length > 1 ? (y[1] - y[0]) / 2 : 0.5];
  const snap = (v) => Math.round(v * ratio) / ratio;
  const left = x.map((v) => snap(p.x(v - halfX))).concat(snap(p.x(x[x.length - 1] + halfX)));
  const low = y.map((v) => snap(p.y(v - halfY))).concat(snap(p.y(y[y.length - 1] + halfY)));
  for (let r = 0; r < y.length; r++) {
    for (let c = 0; c < x.length; c++) {
      const value = z[r][c];
      if (value === null) continue;
      const part = Math.min(1, Math.max(0, (value - zmin) / (zmax - zmin)));
      ctx.fillStyle = colours[Math.round(part * 255)];
      ctx.fillRect(left[c], low[r + 1], left[c + 1] - left[c], low[r] - low[r + 1]);
    }
  }
}

/** @param {(number|null)[]} xs @param {(number|null)[]} ys */
function path(ctx, xs, ys, p, close) {
  ctx.beginPath();
  let open = false;
  for (let i = 0; i < xs.length; i++) {
    if (xs[i] === null) {
      if (open && close) ctx.closePath();
      open = false;
    } else if (open) ctx.lineTo(p.x(xs[i]), p.y(ys[i]));
    else {
      ctx.moveTo(p.x(xs[i]), p.y(ys[i]));
      open = true;
    }
  }
  if (open && close) ctx.closePath();
}

function lines(ctx, trace, p, ratio) {
  if (!trace.x.length) return;
  const filled = trace.fill === "toself";
  path(ctx, trace.x, trace.y, p, filled);
  if (filled) {
    ctx.fillStyle = trace.fillpattern?.shape ? tile(ctx, { ...trace.fillpattern, second: trace.meta?.second }, ratio) : trace.fillcolor;
    ctx.fill();
  }
  if (trace.line?.width) {
    ctx.strokeStyle = trace.line.color;
    ctx.lineWidth = trace.line.width;
    ctx.stroke();
  }
}

/** @type {Map<string, CanvasPattern>} */
const tiles = new Map();

function tile(ctx, pattern, ratio) {
  const key = JSON.stringify([pattern, ratio]);
  const found = tiles.get(key);
  if (found) return found;
  const { shape, size, fgcolor, bgcolor, second } = pattern;
  const canvas = document.createElement("canvas");
  canvas.width = canvas.height = Math.round(size * ratio);
  const t = /** @type {CanvasRenderingContext2D} */ (canvas.getContext("2d"));
  t.scale(canvas.width / size, canvas.height / size);
  t.fillStyle = bgcolor;
  t.fillRect(0, 0, size, size);
  t.fillStyle = t.strokeStyle = fgcolor;
  t.lineWidth = shape === "/" ? 1.7 : 1.1;
  if (shape === ".") {
    for (const [at, colour] of [[size / 4, fgcolor], [(3 * size) / 4, second ?? fgcolor]]) {
      t.beginPath();
      t.arc(at, at, 0.75, 0, 2 * Math.PI);
      t.fillStyle = colour;
      t.fill();
    }
  } else {
    // Drawn beyond the tile's corners, so that strokes meet those of the next tile.
    t.beginPath();
    for (const shift of [-size, 0, size]) {
      t.moveTo(shift - size, size * 2);
      t.lineTo(shift + size * 2, -size);
      if (shape === "x") {
        t.moveTo(shift - size, -size);
        t.lineTo(shift + size * 2, size * 2);
      }
    }
    t.stroke();
  }
  const made = /** @type {CanvasPattern} */ (ctx.createPattern(canvas, "repeat"));
  made.setTransform(new DOMMatrix().scale(size / canvas.width, size / canvas.height));
  tiles.set(key, made);
  return made;
}

const one = (value, i) => (Array.isArray(value) ? value[i] : value);

function markers(ctx, trace, p) {
  const { marker } = trace;
  ctx.globalAlpha = marker.opacity ?? 1;
  for (let i = 0; i < trace.x.length; i++) {
    const radius = one(marker.size, i) / 2;
    const [x, y] = [p.x(trace.x[i]), p.y(trace.y[i])];
    ctx.beginPath();
    if (marker.symbol === "octagon") {
      for (let k = 0; k < 8; k++) {
        const turn = ((k + 0.5) * Math.PI) / 4;
        ctx.lineTo(x + 1.08 * radius * Math.cos(turn), y + 1.08 * radius * Math.sin(turn));
      }
      ctx.closePath();
    } else ctx.arc(x, y, radius, 0, 2 * Math.PI);
    ctx.fillStyle = one(marker.color, i);
    ctx.fill();
    ctx.strokeStyle = one(marker.line.color, i);
    ctx.lineWidth = one(marker.line.width, i);
    ctx.stroke();
  }
  ctx.globalAlpha = 1;
}

/** @typedef {{left: number, right: number, top: number, bottom: number}} Box */

/**
 * Room for a name beside its sign: below, above, right, left; null where each lies on something else.
 * @param {number} width @param {number} size @param {number} x @param {number} y @param {Projection} p @param {Box[]} taken
 * @returns {Box|null}
 */
export function freeSpot(width, size, x, y, p, taken) {
  const clamp = (left) => Math.min(p.right - width - 3, Math.max(p.left + 3, left));
  const away = size * 0.95;
  const corners = [
    [clamp(x - width / 2), y + away],
    [clamp(x - width / 2), y - away - size],
    [x + away, y - size / 2],
    [x - away - width, y - size / 2],
  ];
  for (const [left, top] of corners) {
    const box = { left, right: left + width, top, bottom: top + size };
    const inside = box.left >= p.left && box.right <= p.right && box.top >= p.top && box.bottom <= p.bottom;
    if (inside && !taken.some((o) => box.left < o.right && o.left < box.right && box.top < o.bottom && o.top < box.bottom)) return box;
  }
  return null;
}

/** Words with a rim of paper; "<b>" for bold, leading "<br>" for lines to go down. */
function words(ctx, trace, p, family, notes) {
  ctx.textAlign = "center";
  const { size } = trace.textfont;
  /** @type {Box[]} */
  const taken = notes.map((note) => ({ left: p.x(note.x) - size * 2, right: p.x(note.x) + size * 2, top: p.y(note.y) - size * 1.4, bottom: p.y(note.y) + size * 1.4 }));
  if (trace.meta?.apart) {
    taken.push(...trace.x.map((lon, i) => ({ left: p.x(lon) - size * 0.8, right: p.x(lon) + size * 0.8, top: p.y(trace.y[i]) - size * 0.75, bottom: p.y(trace.y[i]) + size * 0.75 })));
  }
  for (let i = 0; i < trace.x.length; i++) {
    const bold = trace.text[i].includes("<b>");
    const down = (trace.text[i].match(/<br>/g) ?? []).length;
    const text = trace.text[i].replace(/<[^>]+>/g, "");
    ctx.font = `${bold ? 700 : 400} ${size}px ${family}`;
    const below = trace.textposition === "bottom center";
    ctx.textBaseline = below ? "top" : "middle";
    let y = p.y(trace.y[i]) + down * size * 1.25 + (below ? 2 : 0.5);
    let x = p.x(trace.x[i]);
    if (trace.meta?.apart) {
      const spot = freeSpot(ctx.measureText(text).width, size, p.x(trace.x[i]), p.y(trace.y[i]), p, taken);
      if (!spot) continue;
      taken.push(spot);
      [x, y] = [(spot.left + spot.right) / 2, spot.top];
    }
    if (trace.meta?.rim) {
      ctx.strokeStyle = trace.meta.rim;
      ctx.lineWidth = 3.2;
      ctx.strokeText(text, x, y);
    }
    ctx.fillStyle = one(trace.textfont.color, i);
    ctx.fillText(text, x, y);
  }
}

/** A note along a line. */
function turned(ctx, note, p, family) {
  ctx.save();
  ctx.translate(p.x(note.x), p.y(note.y));
  ctx.rotate((note.textangle * Math.PI) / 180);
  ctx.font = `600 ${note.font.size}px ${family}`;
  ctx.textAlign = "center";
  ctx.textBaseline = "middle";
  ctx.strokeStyle = note.rim;
  ctx.lineWidth = 3.5;
  ctx.strokeText(note.text, 0, 0);
  ctx.fillStyle = note.font.color;
  ctx.fillText(note.text, 0, 0);
  ctx.restore();
}
