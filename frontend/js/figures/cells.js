/**
 * Cells of the grid as outlines, so that patterns and edges follow them. Pure.
 */

/**
 * The outline of all cells whose mask is set, as closed loops separated by null: no seams inside, holes kept.
 * @param {(row: number, column: number) => boolean} inside  row = latitude number, column = longitude number
 * @param {ArrayLike<number>} lats  cell centres, south to north
 * @param {ArrayLike<number>} lons  cell centres, west to east
 * @returns {{x: (number|null)[], y: (number|null)[]}}
 */
export function outline(inside, lats, lons) {
  const rows = lats.length;
  const columns = lons.length;
  const height = rows > 1 ? lats[1] - lats[0] : 1;
  const width = columns > 1 ? lons[1] - lons[0] : 1;
  const at = (r, c) => r >= 0 && r < rows && c >= 0 && c < columns && inside(r, c);
  // Directed edges between corners, the inside on the left: corner = row * (columns + 1) + column.
  const corner = (r, c) => r * (columns + 1) + c;
  /** @type {Map<number, number[]>} */
  const edges = new Map();
  const add = (from, to) => {
    const ends = edges.get(from);
    if (ends) ends.push(to);
    else edges.set(from, [to]);
  };
  for (let r = 0; r < rows; r++) {
    for (let c = 0; c < columns; c++) {
      if (!at(r, c)) continue;
      if (!at(r - 1, c)) add(corner(r, c), corner(r, c + 1));
      if (!at(r, c + 1)) add(corner(r, c + 1), corner(r + 1, c + 1));
      if (!at(r + 1, c)) add(corner(r + 1, c + 1), corner(r + 1, c));
      if (!at(r, c - 1)) add(corner(r + 1, c), corner(r, c));
    }
  }
  /** @type {(number|null)[]} */ const x = [];
  /** @type {(number|null)[]} */ const y = [];
  const put = (node) => {
    x.push(Number((lons[0] + ((node % (columns + 1)) - 0.5) * width).toFixed(6)));
    y.push(Number((lats[0] + (Math.floor(node / (columns + 1)) - 0.5) * height).toFixed(6)));
  };
  for (const [start] of edges) {
    while (edges.get(start)?.length) {
      if (x.length) {
        x.push(null);
        y.push(null);
      }
      let node = start;
      let direction = 0;
      put(node);
      do {
        const ends = edges.get(node);
        if (!ends?.length) break;
        let pick = 0;
        if (ends.length > 1) {
          // Two cells touch at a corner: turn left, so that each keeps its own loop.
          const left = turnLeft(direction, columns + 1);
          pick = Math.max(0, ends.findIndex((end) => end - node === left));
        }
        const next = ends.splice(pick, 1)[0];
        direction = next - node;
        node = next;
        put(node);
      } while (node !== start);
    }
  }
  return { x, y };
}

/** @param {number} direction  step in corner numbers @param {number} stride */
function turnLeft(direction, stride) {
  if (direction === 1) return stride;
  if (direction === stride) return -1;
  if (direction === -1) return -stride;
  return 1;
}

/**
 * Rows of one layer at one time, as plotly's heatmap wants them.
 * @param {ArrayLike<number>} values  (time, lat, lon), flat
 * @param {number} index  which time
 * @param {number} rows
 * @param {number} columns
 * @param {(value: number, at: number) => number|null} [change]
 * @returns {(number|null)[][]}
 */
export function rowsOf(values, index, rows, columns, change = (v) => (Number.isFinite(v) ? v : null)) {
  const out = [];
  for (let r = 0; r < rows; r++) {
    const line = new Array(columns);
    for (let c = 0; c < columns; c++) {
      const at = (index * rows + r) * columns + c;
      line[c] = change(values[at], at);
    }
    out.push(line);
  }
  return out;
}
