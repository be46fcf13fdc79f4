// The tiles of one level laid side by side on a canvas of their own, pixel for pixel, with coarser or finer tiles standing
// in for those still to come. The map draws this canvas in one piece, so there is no edge between tiles to show a seam.

import { GROUND } from './ramps.js';

/** @typedef {import('./atlas.js').Layer} Layer */
/** @typedef {import('./tiles.js').Tile} Tile */

const SIDE = 512;
/** How strongly a tile that has come is laid over what stood in for it, frame by frame. */
const FADE = [0.3, 0.4, 0.5, 1];

export class Mosaic {
  /** @param {Layer} layer @param {import('./tiles.js').Tiles} tiles */
  constructor(layer, tiles) {
    this.layer = layer;
    this.tiles = tiles;
    this.canvas = document.createElement('canvas');
    this.context = /** @type {CanvasRenderingContext2D} */ (this.canvas.getContext('2d', { alpha: false }));
    this.level = -1;
    this.c0 = this.c1 = this.r0 = this.r1 = 0;
    /** @type {Map<string, boolean>} cells by key: whether the tile itself is there */
    this.cells = new Map();
    /** @type {Set<string>} */
    this.stale = new Set();
    /** @type {Map<string, {row: number, column: number, frame: number}>} tiles that are just coming into sight */
    this.fresh = new Map();
    this.calm = matchMedia('(prefers-reduced-motion: reduce)');
  }

  /** Part of the canvas in use, pixels of the level; it stops at the edge of the volume. */
  get used() {
    const [columns, rows] = this.layer.atlas.size(this.level);
    return {
      w: Math.min(this.c1 * SIDE, columns) - this.c0 * SIDE,
      h: Math.min(this.r1 * SIDE, rows) - this.r0 * SIDE,
    };
  }

  /** @param {number} row @param {number} column */
  key(row, column) {
    return this.layer.key(this.level, row, column);
  }

  /** A tile has come or was coloured anew. @param {Tile} tile */
  arrived(tile) {
    if (tile.layer.id !== this.layer.id) return;
    const key = tile.key;
    if (this.cells.has(key)) this.stale.add(key);
    else for (const [cell, done] of this.cells) if (!done) this.stale.add(cell);
  }

  /** Everything is drawn anew at the next call of cover(). */
  invalidate() {
    this.level = -1;
  }

  /**
   * Makes the canvas hold these tiles of a level.
   * @param {number} level @param {{c0: number, c1: number, r0: number, r1: number}} range
   */
  cover(level, range) {
    const { c0, c1, r0, r1 } = range;
    const same = level === this.level && c0 === this.c0 && c1 === this.c1 && r0 === this.r0 && r1 === this.r1;
    if (!same) {
      Object.assign(this, { level, c0, c1, r0, r1 });
      const [w, h] = [(c1 - c0) * SIDE, (r1 - r0) * SIDE];
      if (w > this.canvas.width || h > this.canvas.height || w * h * 4 < this.canvas.width * this.canvas.height) {
        this.canvas.width = w;
        this.canvas.height = h;
      }
      this.cells.clear();
      this.stale.clear();
      this.fresh.clear();
    }
    for (let row = r0; row < r1; row++) {
      for (let column = c0; column < c1; column++) {
        const key = this.key(row, column);
        if (!same) this.cells.set(key, this.draw(key, row, column));
        else if (this.stale.has(key)) this.renew(key, row, column);
      }
    }
    this.stale.clear();
    for (const [key, { row, column, frame }] of this.fresh) {
      this.context.globalAlpha = FADE[frame];
      this.draw(key, row, column);
      this.context.globalAlpha = 1;
      if (frame + 1 < FADE.length) this.fresh.set(key, { row, column, frame: frame + 1 });
      else this.fresh.delete(key);
    }
  }

  /** A cell whose tile has come, or whose stand-in can be bettered. @param {string} key @param {number} row @param {number} column */
  renew(key, row, column) {
    const stoodIn = this.cells.get(key) === false;
    const there = Boolean(this.tiles.get(key));
    this.cells.set(key, there);
    if (there && stoodIn && !this.calm.matches) this.fresh.set(key, { row, column, frame: 0 });
    else this.draw(key, row, column);
  }

  /** @param {string} key @param {number} row @param {number} column @returns {boolean} whether the tile itself was there */
  draw(key, row, column) {
    const { context, tiles } = this;
    const [x, y] = [(column - this.c0) * SIDE, (row - this.r0) * SIDE];
    const tile = tiles.get(key);
    if (tile?.bitmap) context.drawImage(tile.bitmap, x, y);
    else if (tile) this.ground(x, y);
    else this.standIn(row, column, x, y);
    return Boolean(tile);
  }

  /** @param {number} x @param {number} y @param {number} [side] */
  ground(x, y, side = SIDE) {
    this.context.fillStyle = `rgb(${GROUND.join(' ')})`;
    this.context.fillRect(x, y, side, side);
  }

  /** The nearest coarser tile, and over it what there is of the next finer level. @param {number} row @param {number} column @param {number} x @param {number} y */
  standIn(row, column, x, y) {
    const { context, layer, level, tiles } = this;
    context.save();
    context.beginPath();
    context.rect(x, y, SIDE, SIDE);
    context.clip();
    this.ground(x, y);
    for (let up = 1; level + up < layer.atlas.levels; up++) {
      const [r, c] = [row >> up, column >> up];
      const tile = tiles.get(layer.key(level + up, r, c));
      if (!tile) continue;
      const side = SIDE * 2 ** up;
      if (tile.bitmap) context.drawImage(tile.bitmap, c * side - this.c0 * SIDE, r * side - this.r0 * SIDE, side, side);
      break;
    }
    const half = SIDE / 2;
    for (let k = 0; level > 0 && k < 4; k++) {
      const [i, j] = [k & 1, k >> 1];
      const tile = tiles.get(layer.key(level - 1, 2 * row + j, 2 * column + i));
      if (tile?.bitmap) context.drawImage(tile.bitmap, x + i * half, y + j * half, half, half);
      else if (tile) this.ground(x + i * half, y + j * half, half);
    }
    context.restore();
  }
}
