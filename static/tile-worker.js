// A worker that fetches tiles, unpacks them, sums the slabs of a depth window, colours them, one sheet or two together, and
// keeps their numbers to count and to read. In: messages from tiles.js. Out: bitmaps, counts, values, or the reason why not.

import { decode, encode, valueTable } from './coding.js';

const SIDE = 512;
const PIXELS = SIDE * SIDE;
/** A server that has not answered by then is taken for gone, ms. */
const PATIENCE = 30000;

/** @typedef {import('./atlas.js').Recipe} Recipe */
/** @typedef {import('./coding.js').Coding} Coding */
/**
 * A tile of one sheet: codes to colour and count, and the exact values where several slabs were combined.
 * @typedef {{codes: Uint16Array|null, values: Float32Array|null, shown: import('./coding.js').Coding}} Part
 */

/** @type {Map<string, {keys: string[], parts: Part[]}>} tiles in hand, of one sheet or two */
const held = new Map();
/** @type {Map<string, {part: Part, users: number}>} what they are made of, by recipe: kept once, however it is shown */
const known = new Map();
/** @type {Map<string, AbortController>} */
const running = new Map();
/** @type {Map<number, import('./lut.js').Palette>} the last few colours */
const luts = new Map();
/** @type {Map<string, Float64Array>} */
const tables = new Map();

class Trouble extends Error {
  /** @param {string} reason server | missing | gone | damaged */
  constructor(reason) {
    super(reason);
    this.reason = reason;
  }
}

const answers = {
  /** @param {{id: number, palette: import('./lut.js').Palette, used: number[]}} m used: those that are still wanted */
  lut({ id, palette, used }) {
    luts.set(id, palette);
    for (const old of luts.keys()) if (luts.size > 8 && !used.includes(old)) luts.delete(old);
  },
  /** @param {{key: string, recipes: Recipe[], lut: number, fresh: boolean}} m */
  async load({ key, recipes, lut, fresh }) {
    const control = new AbortController();
    running.set(key, control);
    let late = false;
    const timer = setTimeout(() => {
      late = true;
      control.abort();
    }, PATIENCE);
    try {
      const parts = await Promise.all(recipes.map((recipe) => known.get(recipe.key)?.part ?? make(recipe, control.signal, fresh)));
      if (control.signal.aborted) return;
      const bytes = hold(key, recipes, parts);
      await paint(key, lut, bytes);
    } catch (error) {
      const reason = error instanceof Trouble ? error.reason : 'server';
      if (late || !control.signal.aborted) postMessage({ type: 'failed', key, reason });
    } finally {
      clearTimeout(timer);
      if (running.get(key) === control) running.delete(key);
    }
  },
  /** @param {{key: string}} m */
  abort({ key }) {
    running.get(key)?.abort();
    running.delete(key);
  },
  /** @param {{key: string, lut: number}} m */
  async paint({ key, lut }) {
    if (held.has(key)) await paint(key, lut, 0);
  },
  /** @param {{key: string}} m */
  drop({ key }) {
    release(key);
  },
  /** @param {{ask: number, tiles: {key: string, x0: number, x1: number, y0: number, y1: number}[], stride: number, first: number, last: number, bins: number, part: 0|1}} m */
  count({ ask, tiles, stride, first, last, bins, part }) {
    const counts = new Uint32Array(bins);
    const bin = new Uint16Array(65536);
    for (let code = 1; code < 65536; code++) {
      bin[code] = Math.min(Math.max(Math.floor(((code - first) / (last - first)) * bins), 0), bins - 1);
    }
    let nothing = 0;
    for (const { key, x0, x1, y0, y1 } of tiles) {
      const codes = held.get(key)?.parts[part]?.codes;
      if (!codes) continue;
      for (let y = y0; y < y1; y += stride) {
        const row = y * SIDE;
        for (let x = x0; x < x1; x += stride) {
          const code = codes[row + x];
          if (code === 0) nothing++;
          else counts[bin[code]]++;
        }
      }
    }
    postMessage({ type: 'answer', ask, counts, nothing }, { transfer: [counts.buffer] });
  },
  /** @param {{ask: number, key: string, column: number, row: number, across: number, down: number, part: 0|1}} m */
  read({ ask, key, column, row, across, down, part }) {
    const tile = held.get(key)?.parts[part];
    const values = new Float64Array(across * down).fill(NaN);
    if (tile?.codes) {
      for (let j = 0; j < down; j++) {
        for (let i = 0; i < across; i++) {
          const at = (row + j) * SIDE + column + i;
          if (tile.codes[at] === 0) continue;
          values[j * across + i] = tile.values ? tile.values[at] : decode(tile.codes[at], tile.shown);
        }
      }
    }
    postMessage({ type: 'answer', ask, values, known: Boolean(tile) });
  },
};

self.onmessage = ({ data }) => answers[/** @type {keyof typeof answers} */ (data.type)](data);

/** @param {string} key @param {Recipe[]} recipes @param {Part[]} parts @returns {number} bytes */
function hold(key, recipes, parts) {
  release(key);
  const keys = recipes.map((recipe) => recipe.key);
  let bytes = 0;
  keys.forEach((name, i) => {
    const use = known.get(name) ?? { part: parts[i], users: 0 };
    use.users++;
    parts[i] = use.part;
    known.set(name, use);
    bytes += (use.part.codes?.byteLength ?? 0) + (use.part.values?.byteLength ?? 0);
  });
  held.set(key, { keys, parts });
  return bytes;
}

/** @param {string} key */
function release(key) {
  for (const name of held.get(key)?.keys ?? []) {
    const use = known.get(name);
    if (use && --use.users === 0) known.delete(name);
  }
  held.delete(key);
}

/** @param {Recipe} recipe @param {AbortSignal} signal @param {boolean} fresh @returns {Promise<Part>} */
async function make(recipe, signal, fresh) {
  const { kind, coding, weightCoding, meanCoding, shown } = recipe;
  const all = (/** @type {string[]} */ addresses) => Promise.all(addresses.map((address) => bring(address, signal, fresh)));
  const [tiles, weights, means] = await Promise.all([all(recipe.tiles), recipe.weights && all(recipe.weights), recipe.means && all(recipe.means)]);
  if (tiles.every((codes) => codes === null)) return { codes: null, values: null, shown };
  if (tiles.length === 1) return { codes: tiles[0], values: null, shown };
  if (kind === 'peak') return { codes: highest(tiles), values: null, shown };
  let values;
  if (kind === 'sum') values = sum(tiles, coding);
  else if (means && weights && meanCoding && weightCoding) values = dispersion(tiles, means, weights, coding, meanCoding, weightCoding);
  else values = mean(tiles, weights, coding, weightCoding);
  return { codes: recode(values, shown), values, shown };
}

/** One tile as stored: a gzip member with 512 x 512 little-endian codes. @param {string} address @param {AbortSignal} signal @param {boolean} fresh */
async function bring(address, signal, fresh) {
  const url = new URL(address, base);
  const answer = await fetch(url, { signal, cache: fresh ? 'reload' : 'default' });
  if (answer.status === 204) return null;
  if (answer.status === 410) throw new Trouble('gone');
  if (answer.status === 404) throw new Trouble('missing');
  // The server itself says in JSON that a file is damaged; another 502 is a proxy that has lost the server.
  const told = answer.headers.get('Content-Type')?.startsWith('application/json');
  if (!answer.ok) throw new Trouble(answer.status === 502 && told ? 'damaged' : 'server');
  const bytes = await unpacked(answer);
  return new Uint16Array(bytes);
}

/**
 * The content of a gzip member, piece by piece: what the browser gathers for `arrayBuffer()` or a Blob stays in memory until
 * this worker next collects its garbage, which it has little cause to.
 * @param {Response} answer
 * @returns {Promise<ArrayBuffer>}
 */
async function unpacked(answer) {
  const source = /** @type {ReadableStream<Uint8Array<ArrayBuffer>>} */ (answer.body).getReader();
  const { readable, writable } = new DecompressionStream('gzip');
  const [sink, result] = [writable.getWriter(), readable.getReader()];
  const bytes = new Uint8Array(2 * PIXELS);
  const read = async () => {
    let length = 0;
    for (;;) {
      const { done, value } = await result.read();
      if (done) return length;
      if (length + value.length > bytes.length) throw new RangeError('too long');
      bytes.set(value, length);
      length += value.length;
    }
  };
  const length = read().catch(() => -1);
  for (;;) {
    const { done, value } = await source.read();
    if (done) break;
    // What is wrong with the bytes is heard at the other end.
    sink.write(value).catch(() => {});
  }
  sink.close().catch(() => {});
  if ((await length) !== bytes.length) throw new Trouble('damaged');
  return bytes.buffer;
}

/** Slabs add up as surface densities. Nothing anywhere stays nothing (NaN). @param {(Uint16Array|null)[]} tiles @param {any} coding */
function sum(tiles, coding) {
  const table = valuesOf(coding);
  const total = new Float64Array(PIXELS);
  const some = new Uint8Array(PIXELS);
  for (const codes of tiles) {
    if (!codes) continue;
    for (let i = 0; i < PIXELS; i++) {
      total[i] += table[codes[i]];
      some[i] |= codes[i] ? 1 : 0;
    }
  }
  return Float32Array.from(total, (x, i) => (some[i] ? x : NaN));
}

/** Of peaks the highest is shown, and codes grow with the value. @param {(Uint16Array|null)[]} tiles */
function highest(tiles) {
  const most = new Uint16Array(PIXELS);
  for (const codes of tiles) {
    if (!codes) continue;
    for (let i = 0; i < PIXELS; i++) if (codes[i] > most[i]) most[i] = codes[i];
  }
  return most;
}

/** Means are weighted by their weight sheet. @param {(Uint16Array|null)[]} tiles @param {(Uint16Array|null)[]|null} weights @param {any} coding @param {any} weightCoding */
function mean(tiles, weights, coding, weightCoding) {
  const table = valuesOf(coding);
  const heavy = weightCoding ? valuesOf(weightCoding) : null;
  const above = new Float64Array(PIXELS);
  const below = new Float64Array(PIXELS);
  tiles.forEach((codes, k) => {
    const weight = weights?.[k];
    if (!codes || (weights && !weight)) return;
    for (let i = 0; i < PIXELS; i++) {
      if (codes[i] === 0) continue;
      const w = heavy && weight ? heavy[weight[i]] : 1;
      above[i] += w * table[codes[i]];
      below[i] += w;
    }
  });
  return Float32Array.from(above, (x, i) => (below[i] > 0 ? x / below[i] : NaN));
}

/**
 * Dispersions s about means m, with weights w, make that about the common mean M: sqrt(sum w (s^2 + m^2) / sum w - M^2).
 * @param {(Uint16Array|null)[]} tiles @param {(Uint16Array|null)[]} means @param {(Uint16Array|null)[]} weights
 * @param {Coding} coding @param {Coding} meanCoding @param {Coding} weightCoding
 */
function dispersion(tiles, means, weights, coding, meanCoding, weightCoding) {
  const [spread, middle, heavy] = [valuesOf(coding), valuesOf(meanCoding), valuesOf(weightCoding)];
  const squares = new Float64Array(PIXELS);
  const above = new Float64Array(PIXELS);
  const below = new Float64Array(PIXELS);
  means.forEach((about, k) => {
    const [codes, weight] = [tiles[k], weights[k]];
    if (!about || !weight) return;
    for (let i = 0; i < PIXELS; i++) {
      if (about[i] === 0) continue;
      const w = heavy[weight[i]];
      const m = middle[about[i]];
      const s = codes ? spread[codes[i]] : 0;
      squares[i] += w * (s * s + m * m);
      above[i] += w * m;
      below[i] += w;
    }
  });
  return Float32Array.from(squares, (x, i) => (below[i] > 0 ? Math.sqrt(Math.max(x / below[i] - (above[i] / below[i]) ** 2, 0)) : NaN));
}

/** Codes to colour the combined values with. @param {Float32Array} values @param {import('./coding.js').Coding} coding */
function recode(values, coding) {
  const codes = new Uint16Array(PIXELS);
  for (let i = 0; i < PIXELS; i++) codes[i] = encode(values[i], coding);
  return codes;
}

/** @param {import('./coding.js').Coding} coding */
function valuesOf(coding) {
  const name = JSON.stringify(coding);
  const table = tables.get(name) ?? valueTable(coding);
  tables.set(name, table);
  return table;
}

/** An empty tile, where only the other sheet has something. */
const NOTHING = new Uint16Array(PIXELS);

/** @param {string} key @param {number} lut @param {number} bytes */
async function paint(key, lut, bytes) {
  const parts = held.get(key)?.parts ?? [];
  if (parts.every(({ codes }) => !codes)) return postMessage({ type: 'painted', key, lut, bitmap: null, bytes });
  const palette = luts.get(lut);
  if (!palette) return;
  const { table, rows, columns } = palette;
  const picture = new ImageData(SIDE, SIDE);
  const out = new Uint32Array(picture.data.buffer);
  const [first, second] = parts.map(({ codes }) => codes ?? NOTHING);
  if (rows && columns) for (let i = 0; i < PIXELS; i++) out[i] = table[rows[first[i]] + columns[second[i]]];
  else for (let i = 0; i < PIXELS; i++) out[i] = table[first[i]];
  const bitmap = await createImageBitmap(picture);
  postMessage({ type: 'painted', key, lut, bitmap, bytes }, { transfer: [bitmap] });
}

/** The document's address: tiles are named relative to it. It comes as the worker's name. */
const base = self.name;
