// The atlas as the frame knows it: atlas.json read once, its geometry (levels, tiles, slabs) and every address built
// from it. All addresses are relative to the document, so the frame works under any path.

import { windowCoding } from './coding.js';

/** @typedef {{name: string, title: string, kind: 'sum'|'mean'|'dispersion'|'peak', weight: string|null, mean?: string, coding: 'log'|'linear', low: number, step: number,
 *   unit: string, total_unit: string, totals: number[]|null, percentiles: Record<string, number>, range: [number, number]}} Sheet */
/** @typedef {{name: string, redshift: number|null, scale_factor: number|null, age_gyr: number|null,
 *   kpc_per_arcsec_comoving: number|null, kpc_per_arcsec_proper: number|null, sheets: Sheet[],
 *   catalogue: null|{count: number, id: string|null, rank: string|null, size: string|null,
 *   columns: {name: string, unit: string|null, type: string, min: number, max: number}[]}}} Epoch */
/** @typedef {import('./coding.js').Coding} Coding */
/** @typedef {[number, number]} Slabs from the first slab up to, not including, the last */

/** @typedef {''|'hue'|'above'} How the second sheet is shown with the first: not at all, as its hue, as light laid over it */

/**
 * What a worker needs to make one tile of a sheet.
 * @typedef {object} Recipe
 * @property {string} key of the tile, whatever it is shown with
 * @property {string[]} tiles addresses, one for each slab
 * @property {string[]|null} weights addresses of the weights, where a mean or a dispersion is taken over several slabs
 * @property {string[]|null} means addresses of the means that a dispersion is about
 * @property {Sheet['kind']} kind
 * @property {Coding} coding of the tiles
 * @property {Coding|null} weightCoding
 * @property {Coding|null} meanCoding
 * @property {Coding} shown coding of the codes that are coloured
 */

export class Atlas {
  /**
   * @param {any} json the content of atlas.json @param {string} [base] address of the atlas, relative to the document
   * @param {string} [name] by which a link to another atlas names it
   */
  constructor(json, base = '', name = '') {
    if (json?.format !== 'tilemap-atlas') throw new TypeError(`expected format tilemap-atlas, got ${json?.format}`);
    if (json.version !== 1) throw new TypeError(`expected version 1, got ${json.version}`);
    this.json = json;
    this.base = base;
    this.name = name;
    /** @type {string} */ this.id = json.id;
    /** @type {string} */ this.title = json.title ?? '';
    /** @type {number} */ this.tile = json.tile;
    /** @type {number} */ this.levels = json.levels;
    /** @type {number} */ this.columns = json.pixels[0];
    /** @type {number} */ this.rows = json.pixels[1];
    /** @type {number[]} */ this.edges = json.slabs;
    /** @type {Epoch[]} */ this.epochs = json.epochs;
    this.view = json.view;
    /** side of a finest pixel, atlas unit */
    this.pixel = (json.view.u[1] - json.view.u[0]) / this.columns;
  }

  /** Reads atlas.json beside the document, or at another address. @param {string} [base] @param {string} [name] */
  static async open(base = '', name = '') {
    const answer = await fetch(`${base}atlas.json`, { cache: 'no-cache' });
    if (!answer.ok) throw new Error(`${answer.status} ${answer.statusText}`.trim());
    return new Atlas(await answer.json(), base, name);
  }

  /** @returns {import('./view.js').Bounds} */
  get bounds() {
    const { u, v } = this.view;
    return { u0: u[0], u1: u[1], v0: v[0], v1: v[1] };
  }

  get slabs() {
    return this.edges.length - 1;
  }

  /** @param {Slabs} slabs */
  wholeDepth([first, end]) {
    return first === 0 && end === this.slabs;
  }

  /** @param {number} level */
  pixelAt(level) {
    return this.pixel * 2 ** level;
  }

  /** Pixels of a level across and down. @param {number} level @returns {[number, number]} */
  size(level) {
    return [Math.round(this.columns / 2 ** level), Math.round(this.rows / 2 ** level)];
  }

  /** Tiles of a level across and down. @param {number} level @returns {[number, number]} */
  grid(level) {
    const [columns, rows] = this.size(level);
    return [Math.ceil(columns / this.tile), Math.ceil(rows / this.tile)];
  }

  /**
   * The level whose pixels come nearest to a device pixel, a little for coarser ones: one level finer is four times the bytes.
   * @param {number} size side of a device pixel, atlas unit
   */
  levelFor(size) {
    return Math.min(Math.max(Math.round(Math.log2(size / this.pixel) + 0.2), 0), this.levels - 1);
  }

  /**
   * The tiles of a level that a rectangle touches.
   * @param {number} level @param {import('./view.js').Bounds} bounds
   * @returns {{c0: number, c1: number, r0: number, r1: number}} up to, not including, c1 and r1
   */
  range(level, { u0, u1, v0, v1 }) {
    const side = this.pixelAt(level) * this.tile;
    const [across, down] = this.grid(level);
    const clip = (/** @type {number} */ x, /** @type {number} */ top) => Math.min(Math.max(x, 0), top);
    return {
      c0: clip(Math.floor((u0 - this.view.u[0]) / side), across),
      c1: clip(Math.ceil((u1 - this.view.u[0]) / side), across),
      r0: clip(Math.floor((this.view.v[1] - v1) / side), down),
      r1: clip(Math.ceil((this.view.v[1] - v0) / side), down),
    };
  }

  /**
   * The pixel of a level that holds a place, or null outside the volume.
   * @param {number} level @param {number} u @param {number} v
   */
  pixelOf(level, u, v) {
    const [columns, rows] = this.size(level);
    const column = Math.floor((u - this.view.u[0]) / this.pixelAt(level));
    const row = Math.floor((this.view.v[1] - v) / this.pixelAt(level));
    return column >= 0 && row >= 0 && column < columns && row < rows ? { column, row } : null;
  }

  /** @param {Epoch} epoch @param {string} name */
  sheet(epoch, name) {
    return epoch.sheets.find((s) => s.name === name);
  }

  /** The slabs that a depth interval touches most nearly. @param {number} a @param {number} b @returns {Slabs} */
  slabsOf(a, b) {
    const nearest = (/** @type {number} */ d) => this.edges.reduce((best, e, i) => (Math.abs(e - d) < Math.abs(this.edges[best] - d) ? i : best), 0);
    const first = Math.min(nearest(a), this.slabs - 1);
    return [first, Math.max(nearest(b), first + 1)];
  }
}

/** One sheet of one epoch through one depth window, or two together: what a side of the map shows at a time. */
export class Layer {
  /** @param {Atlas} atlas @param {Epoch} epoch @param {Sheet} sheet @param {Slabs} slabs @param {Sheet} [mate] @param {How} [how] */
  constructor(atlas, epoch, sheet, slabs, mate, how = '') {
    this.atlas = atlas;
    this.epoch = epoch;
    this.sheet = sheet;
    this.slabs = slabs;
    this.weight = sheet.weight ? atlas.sheet(epoch, sheet.weight) : undefined;
    this.mean = sheet.mean ? atlas.sheet(epoch, sheet.mean) : undefined;
    this.id = `${atlas.id}/${epoch.name}/${sheet.name}/${slabs[0]}-${slabs[1]}`;
    /** @type {Layer|null} the second sheet */
    this.mate = mate && how ? new Layer(atlas, epoch, mate, slabs) : null;
    if (mate && how) this.id += `/${how}/${mate.name}`;
    const whole = atlas.wholeDepth(slabs) && atlas.slabs > 1;
    /** @type {(string|number)[]} */
    this.names = whole ? ['whole'] : Array.from({ length: slabs[1] - slabs[0] }, (_, i) => slabs[0] + i);
    /** @type {Coding} */
    this.coding = windowCoding(sheet, this.names.length);
  }

  /** @param {number} level @param {number} row @param {number} column */
  key(level, row, column) {
    return `${this.id}/${level}/${row}/${column}`;
  }

  /** One recipe for each sheet. @param {number} level @param {number} row @param {number} column @returns {Recipe[]} */
  recipes(level, row, column) {
    const { atlas, epoch, sheet, mate, slabs } = this;
    const address = (/** @type {string} */ name, /** @type {string|number} */ slab) =>
      `${atlas.base}tiles/${[atlas.id, epoch.name, name, level, slab, row, column].map(encodeURIComponent).join('/')}`;
    const tiles = (/** @type {Sheet} */ from) => this.names.map((slab) => address(from.name, slab));
    const coding = (/** @type {Sheet} */ { coding, low, step }) => ({ coding, low, step });
    const several = this.names.length > 1;
    const weight = several ? this.weight : undefined;
    const mean = several ? this.mean : undefined;
    const recipe = {
      key: [atlas.id, epoch.name, sheet.name, ...slabs, level, row, column].join('/'),
      tiles: tiles(sheet),
      weights: weight ? tiles(weight) : null,
      means: mean ? tiles(mean) : null,
      kind: sheet.kind,
      coding: coding(sheet),
      weightCoding: weight ? coding(weight) : null,
      meanCoding: mean ? coding(mean) : null,
      shown: this.coding,
    };
    return [recipe, ...(mate?.recipes(level, row, column) ?? [])];
  }
}

/** Mass per slab along the line of sight: the sheet's own, or its weight's. @param {Atlas} atlas @param {Epoch} epoch @param {Sheet} sheet */
export function slabTotals(atlas, epoch, sheet) {
  const from = sheet.weight ? (atlas.sheet(epoch, sheet.weight) ?? sheet) : sheet;
  return { totals: from.totals ?? new Array(atlas.slabs).fill(0), unit: from.total_unit };
}
