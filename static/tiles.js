// Which tiles are fetched, which are kept. In: a list of wished tiles, most wanted first. Out: tiles with their bitmaps,
// as they come. Tiles that are no longer wished are called off; what has been seen is kept as long as there is room.

/** @typedef {import('./atlas.js').Layer} Layer */
/**
 * @typedef {object} Tile
 * @property {string} key @property {Layer} layer @property {number} level @property {number} row @property {number} column
 * @property {'waiting'|'loading'|'ready'|'failed'} state
 * @property {ImageBitmap|null} bitmap null for an empty tile
 * @property {number} lut the tone it is coloured with @property {number} asked the tone last asked for
 * @property {number} bytes @property {number} used @property {number} tries @property {number} retry time in ms
 * @property {Worker} worker
 */
/** @typedef {{arrived(tile: Tile): void, trouble(kind: 'server'|'missing'|'damaged'): void, fine(): void, calm(): void, gone(): void}} Listener */
/** @typedef {{layer: Layer, level: number, row: number, column: number}} Place */

const AT_ONCE = 8;
const BITMAP_BYTES = 512 * 512 * 4;
const FIRST_DELAY = 500;
const LONGEST_DELAY = 15000;

/** Two workers on a small machine, four at most. They load while the atlas is still being read. */
const POOL = Array.from({ length: Math.min(Math.max((navigator.hardwareConcurrency ?? 2) - 1, 2), 4) }, () =>
  new Worker(new URL('./tile-worker.js', import.meta.url), { type: 'module', name: document.baseURI }));

export class Tiles {
  /** @param {Listener} listener */
  constructor(listener) {
    this.listener = listener;
    /** bytes */ this.budget = room();
    /** @type {Map<string, Tile>} */
    this.all = new Map();
    /** @type {Set<string>} */
    this.wished = new Set();
    /** @type {Set<string>} */
    this.needed = new Set();
    /** @type {Tile[]} */
    this.queue = [];
    this.loading = 0;
    this.bytes = 0;
    this.tick = 0;
    this.asked = 0;
    this.pause = { until: 0, delay: 0 };
    this.asks = new Map();
    this.luts = 0;
    this.workers = POOL;
    for (const worker of this.workers) worker.onmessage = ({ data }) => this.hear(worker, data);
    addEventListener('online', () => this.resume());
  }

  /** Makes colours known to all workers. @param {import('./lut.js').Palette} palette @param {number[]} used ids still wanted @returns {number} their id */
  addLut(palette, used) {
    const id = ++this.luts;
    for (const worker of this.workers) worker.postMessage({ type: 'lut', id, palette, used });
    return id;
  }

  /** A tile that can be drawn now. @param {string} key */
  get(key) {
    const tile = this.all.get(key);
    if (!tile || tile.bytes < 0) return undefined;
    tile.used = ++this.tick;
    return tile;
  }

  /**
   * Says what is wanted, most wanted first; everything else in flight is called off.
   * @param {Place[]} needed for the view @param {Place[]} more that may be needed next @param {(layer: Layer) => number} lutOf
   */
  wish(needed, more, lutOf) {
    this.wished = new Set();
    this.needed = new Set(needed.map(({ layer, level, row, column }) => layer.key(level, row, column)));
    this.queue = [];
    for (const { layer, level, row, column } of [...needed, ...more]) {
      const key = layer.key(level, row, column);
      if (this.wished.has(key)) continue;
      this.wished.add(key);
      let tile = this.all.get(key);
      if (!tile) {
        // The worker follows from the place, so that a tile called off and wished again finds its own worker.
        const worker = this.workers[(row + column + level) % this.workers.length];
        tile = { key, layer, level, row, column, state: 'waiting', bitmap: null, lut: 0, asked: 0, bytes: -1, used: 0, tries: 0, retry: 0, worker };
        this.all.set(key, tile);
      }
      const lut = lutOf(layer);
      if (tile.state === 'ready') {
        if (tile.asked !== lut) this.paint(tile, lut);
      } else {
        // One that is loading is painted again if it comes in the old colours.
        tile.asked = lut;
        if (tile.state === 'waiting' || (tile.state === 'failed' && performance.now() > tile.retry)) this.queue.push(tile);
      }
    }
    for (const tile of this.all.values()) {
      if (tile.state === 'loading' && !this.wished.has(tile.key)) {
        tile.worker.postMessage({ type: 'abort', key: tile.key });
        this.loading--;
        tile.state = 'waiting';
      }
      if (tile.state !== 'ready' && tile.state !== 'loading' && !this.wished.has(tile.key)) this.all.delete(tile.key);
    }
    this.pump();
  }

  /** How many of the tiles needed for the view are still to come. */
  get pending() {
    let n = 0;
    for (const key of this.needed) {
      const tile = this.all.get(key);
      if (tile && (tile.state === 'waiting' || tile.state === 'loading' || tile.lut !== tile.asked) && tile.state !== 'failed') n++;
    }
    return n;
  }

  pump() {
    if (performance.now() < this.pause.until) return;
    const room = this.pause.delay ? 1 : AT_ONCE;
    while (this.loading < room && this.queue.length) {
      const tile = /** @type {Tile} */ (this.queue.shift());
      tile.state = 'loading';
      this.loading++;
      const { key, layer, level, row, column, asked: lut } = tile;
      tile.worker.postMessage({ type: 'load', key, recipes: layer.recipes(level, row, column), lut, fresh: tile.tries > 0 });
    }
  }

  /** @param {Worker} worker @param {any} data */
  hear(worker, data) {
    if (data.type === 'answer') {
      this.asks.get(data.ask)?.(data);
      this.asks.delete(data.ask);
      return;
    }
    const tile = this.all.get(data.key);
    if (data.type === 'failed') {
      if (tile?.state === 'loading') this.failed(tile, data.reason);
    } else if (tile) this.painted(tile, data);
    else {
      data.bitmap?.close();
      worker.postMessage({ type: 'drop', key: data.key });
    }
  }

  /** @param {Tile} tile @param {{lut: number, bitmap: ImageBitmap|null, bytes: number}} data */
  painted(tile, { lut, bitmap, bytes }) {
    tile.bitmap?.close();
    tile.bitmap = bitmap;
    tile.lut = lut;
    if (tile.state === 'loading') {
      this.loading--;
      if (this.pause.delay) this.listener.fine();
      this.pause = { until: 0, delay: 0 };
    }
    if (tile.state !== 'ready') {
      tile.state = 'ready';
      tile.tries = 0;
      tile.bytes = bitmap ? bytes + BITMAP_BYTES : 0;
      this.bytes += tile.bytes;
      this.evict();
    }
    if (tile.asked !== lut) this.paint(tile, tile.asked);
    this.listener.arrived(tile);
    this.pump();
  }

  /** @param {Tile} tile @param {'server'|'missing'|'damaged'|'gone'} reason */
  failed(tile, reason) {
    this.loading--;
    tile.state = 'waiting';
    if (reason === 'gone') return this.listener.gone();
    if (!this.wished.has(tile.key)) return this.pump();
    if (reason === 'server') {
      const delay = Math.min(this.pause.delay * 2 || FIRST_DELAY, LONGEST_DELAY);
      if (performance.now() >= this.pause.until) {
        this.pause = { until: performance.now() + delay, delay };
        setTimeout(() => this.resume(), delay + 10);
      }
      this.queue.unshift(tile);
      return this.listener.trouble('server');
    }
    if (++tile.tries < 3) this.queue.push(tile);
    else {
      tile.state = 'failed';
      tile.retry = performance.now() + 30000;
      this.listener.trouble(reason);
      this.listener.arrived(tile);
    }
    this.pump();
  }

  resume() {
    this.pause.until = 0;
    this.pump();
    if (this.pause.delay && !this.loading) {
      // What could not be had is no longer wanted.
      this.pause.delay = 0;
      this.listener.calm();
    }
  }

  /** @param {Tile} tile @param {number} lut */
  paint(tile, lut) {
    tile.asked = lut;
    if (!tile.bitmap) tile.lut = lut;
    else tile.worker.postMessage({ type: 'paint', key: tile.key, lut });
  }

  /** Colours every kept tile of a layer anew, the given ones first. @param {Layer} layer @param {number} lut @param {Set<string>|null} only */
  repaint(layer, lut, only) {
    for (const tile of this.all.values()) {
      if (tile.layer.id === layer.id && tile.state === 'ready' && tile.asked !== lut && (!only || only.has(tile.key))) this.paint(tile, lut);
    }
  }

  evict() {
    if (this.bytes <= this.budget) return;
    const old = [...this.all.values()].filter((t) => t.state === 'ready' && !this.wished.has(t.key)).sort((a, b) => a.used - b.used);
    for (const tile of old) {
      if (this.bytes <= 0.8 * this.budget) break;
      this.drop(tile);
    }
  }

  /** @param {Tile} tile */
  drop(tile) {
    tile.worker.postMessage({ type: 'drop', key: tile.key });
    tile.bitmap?.close();
    tile.bitmap = null;
    this.bytes -= Math.max(tile.bytes, 0);
    this.all.delete(tile.key);
  }

  /** Forgets everything, as when the atlas was rebuilt. */
  clear() {
    this.wish([], [], () => 0);
    for (const tile of [...this.all.values()]) this.drop(tile);
  }

  /** @param {Worker} worker @param {object} message @returns {Promise<any>} */
  ask(worker, message) {
    const ask = ++this.asked;
    return new Promise((resolve) => {
      this.asks.set(ask, resolve);
      worker.postMessage({ ...message, ask });
    });
  }

  /**
   * The values of a rectangle of pixels inside one tile; NaN for nothing.
   * @param {string} key @param {number} column @param {number} row @param {number} [across] @param {number} [down]
   * @param {number} [part] 0 or 1: of the first sheet or of the second
   * @returns {Promise<Float64Array|null>} null while the tile is not there
   */
  async read(key, column, row, across = 1, down = 1, part = 0) {
    const tile = this.get(key);
    if (!tile || tile.state !== 'ready') return null;
    const { values, known } = await this.ask(tile.worker, { type: 'read', key, column, row, across, down, part });
    return known || !tile.bitmap ? values : null;
  }

  /**
   * How often each range of codes occurs in parts of tiles.
   * @param {{key: string, x0: number, x1: number, y0: number, y1: number}[]} parts
   * @param {{stride: number, first: number, last: number, bins: number, part: 0|1}} how
   * @returns {Promise<{counts: Float64Array, nothing: number}>}
   */
  async count(parts, how) {
    const counts = new Float64Array(how.bins);
    let nothing = 0;
    const answers = this.workers.map((worker) => {
      const tiles = parts.filter((p) => this.all.get(p.key)?.worker === worker);
      return tiles.length ? this.ask(worker, { type: 'count', tiles, ...how }) : null;
    });
    for (const answer of await Promise.all(answers)) {
      if (!answer) continue;
      nothing += answer.nothing;
      for (let i = 0; i < counts.length; i++) counts[i] += answer.counts[i];
    }
    return { counts, nothing };
  }
}

/** Bytes that tiles may take: less on a small device, as far as the browser says (`deviceMemory`, GiB). */
function room() {
  return Math.min(/** @type {any} */ (navigator).deviceMemory ?? 8, 8) * 24e6;
}
