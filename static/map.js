// The map: draws the layer that is shown on a 2-D canvas, asks for the tiles it needs, and changes layers and tones without
// ever going blank. In: a view, a layer, a tone. Out: pixels, and where on the tiles a place lies.

import { lut } from './lut.js';
import { Mosaic } from './mosaic.js';
import { GROUND } from './ramps.js';

/** @typedef {import('./atlas.js').Layer} Layer */
/** @typedef {import('./lut.js').Tone} Tone */
/** @typedef {import('./view.js').View} View */
/** @typedef {import('./tiles.js').Place} Place */
/**
 * A layer with its colours: the tone asked for, the tone that was last painted, its table.
 * @typedef {{layer: Layer, tone: Tone, painted: Tone, lut: number, mosaic: Mosaic}} Plate
 */

const SIDE = 512;
/** Above this many device pixels per data pixel, pixels are shown with crisp edges. */
const CRISP = 3;
/** A layer is exchanged when it is complete on screen, or after this time with its coarse tiles standing in (ms). */
const PATIENCE = 450;
const FADE = 180;

/**
 * The tiles of a range, nearest to the middle of the view first.
 * @param {Layer} layer @param {number} level @param {{c0: number, c1: number, r0: number, r1: number}} range @param {View} view
 * @returns {Place[]}
 */
function places(layer, level, range, view) {
  const side = layer.atlas.pixelAt(level) * SIDE;
  const [u, v] = [(view.u - layer.atlas.view.u[0]) / side, (layer.atlas.view.v[1] - view.v) / side];
  const list = [];
  for (let row = range.r0; row < range.r1; row++) {
    for (let column = range.c0; column < range.c1; column++) list.push({ layer, level, row, column });
  }
  const away = (/** @type {Place} */ { row, column }) => Math.hypot(column + 0.5 - u, row + 0.5 - v);
  return list.sort((a, b) => away(a) - away(b));
}

/** @param {Tone} a @param {Tone} b */
const same = (a, b) => a.lo === b.lo && a.hi === b.hi && a.curve === b.curve && a.ramp === b.ramp;

export class MapSurface {
  /** @param {HTMLCanvasElement} canvas @param {import('./tiles.js').Tiles} tiles @param {() => void} wake asks for a frame */
  constructor(canvas, tiles, wake) {
    this.canvas = canvas;
    this.context = /** @type {CanvasRenderingContext2D} */ (canvas.getContext('2d', { alpha: false }));
    this.tiles = tiles;
    this.wake = wake;
    this.ratio = 1;
    this.calm = matchMedia('(prefers-reduced-motion: reduce)');
    /** @type {Plate|null} */ this.front = null;
    /** @type {Plate|null} */ this.next = null;
    /** @type {Plate|null} */ this.old = null;
    this.since = 0;
    this.fadeFrom = 0;
    this.recolouring = false;
    this.rest = 0;
  }

  /** @param {number} w device pixels @param {number} h device pixels @param {number} ratio device pixels per CSS pixel */
  resize(w, h, ratio) {
    this.canvas.width = w;
    this.canvas.height = h;
    this.ratio = ratio;
  }

  /** Shows a layer in a tone. @param {Layer} layer @param {Tone} tone */
  show(layer, tone) {
    const { front } = this;
    if (front?.layer.id === layer.id) {
      this.next = null;
      if (!same(front.tone, tone)) this.recolour(tone);
    } else if (this.next?.layer.id === layer.id) {
      if (!same(this.next.tone, tone)) Object.assign(this.next, { tone, painted: tone, lut: this.tiles.addLut(lut(tone, layer.coding)) });
    } else {
      const id = this.tiles.addLut(lut(tone, layer.coding));
      this.next = { layer, tone, painted: tone, lut: id, mosaic: new Mosaic(layer, this.tiles) };
      this.since = performance.now();
    }
    this.wake();
  }

  /** The layer that is, or is about to be, shown. */
  get wanted() {
    return this.next ?? this.front;
  }

  /** Takes over new colours for the whole view at once. @param {Tone} tone */
  async recolour(tone) {
    let plate = this.front;
    if (!plate) return;
    plate.tone = tone;
    if (this.recolouring) return;
    this.recolouring = true;
    while (this.front && !same(this.front.tone, this.front.painted)) {
      plate = this.front;
      plate.painted = plate.tone;
      const begin = performance.now();
      plate.lut = this.tiles.addLut(lut(plate.tone, plate.layer.coding));
      const visible = new Set(plate.mosaic.cells.keys());
      this.tiles.repaint(plate.layer, plate.lut, visible);
      await Promise.race([this.coloured(visible, plate.lut), new Promise((done) => setTimeout(done, 1000))]);
      plate.mosaic.invalidate();
      performance.measure('recolour', { start: begin });
      this.wake();
      await new Promise((done) => requestAnimationFrame(done));
    }
    this.recolouring = false;
    this.wake();
    clearTimeout(this.rest);
    // The tiles that are out of sight follow when the hand rests.
    const { layer, lut: last } = plate;
    this.rest = window.setTimeout(() => this.tiles.repaint(layer, last, null), 200);
  }

  /** @param {Set<string>} keys @param {number} id @returns {Promise<void>} when these tiles have that tone */
  coloured(keys, id) {
    const done = () => [...keys].every((key) => ((tile) => !tile || tile.state !== 'ready' || tile.lut >= id)(this.tiles.all.get(key)));
    return new Promise((resolve) => {
      this.checkColours = () => done() && resolve();
      this.checkColours();
    });
  }

  /** @param {import('./tiles.js').Tile} tile */
  arrived(tile) {
    if (this.recolouring && this.front?.mosaic.cells.get(tile.key)) this.checkColours?.();
    else for (const plate of [this.front, this.next, this.old]) plate?.mosaic.arrived(tile);
    this.wake();
  }

  /** @param {View} view @param {Layer} layer */
  frameOf(view, layer) {
    const level = layer.atlas.levelFor(view.width / (view.w * this.ratio));
    return { level, range: layer.atlas.range(level, view.bounds) };
  }

  /**
   * Tells the tile store what this view needs, nearest to the middle first.
   * @param {View} view @param {boolean} [ahead] also what a next step would need: the tiles around, and the next coarser ones
   */
  ask(view, ahead = false) {
    const plate = this.wanted;
    if (!plate) return;
    const { layer } = plate;
    const { level, range } = this.frameOf(view, layer);
    const base = { layer, level: layer.atlas.levels - 1, row: 0, column: 0 };
    const needed = [base, ...places(layer, level, range, view)];
    const more = [];
    if (ahead && layer.names.length === 1) {
      const [across, down] = layer.atlas.grid(level);
      const { c0, c1, r0, r1 } = range;
      const around = { c0: Math.max(c0 - 1, 0), c1: Math.min(c1 + 1, across), r0: Math.max(r0 - 1, 0), r1: Math.min(r1 + 1, down) };
      more.push(...places(layer, level, around, view));
      if (level + 1 < layer.atlas.levels) more.unshift(...places(layer, level + 1, layer.atlas.range(level + 1, view.bounds), view));
    }
    this.tiles.wish(needed, more, () => plate.lut);
  }

  /** Whether all tiles of the view are there. @param {Plate} plate @param {View} view */
  complete(plate, view) {
    const { level, range } = this.frameOf(view, plate.layer);
    for (let row = range.r0; row < range.r1; row++) {
      for (let column = range.c0; column < range.c1; column++) {
        const tile = this.tiles.all.get(plate.layer.key(level, row, column));
        if (!tile || (tile.state !== 'failed' && (tile.bytes < 0 || tile.lut < plate.lut))) return false;
      }
    }
    return true;
  }

  /**
   * Draws one frame.
   * @param {View} view @param {number} now ms
   * @returns {boolean} whether another frame is needed
   */
  render(view, now) {
    this.exchange(view, now);
    const { context, canvas } = this;
    context.setTransform(1, 0, 0, 1, 0, 0);
    context.fillStyle = `rgb(${GROUND.join(' ')})`;
    context.fillRect(0, 0, canvas.width, canvas.height);
    const faded = this.old ? Math.min((now - this.fadeFrom) / FADE, 1) : 1;
    if (this.old) this.drawPlate(this.old, view, 1);
    if (this.front) this.drawPlate(this.front, view, faded);
    if (faded === 1) this.old = null;
    this.edge(view);
    return Boolean(this.old || this.next || this.front?.mosaic.fresh.size);
  }

  /** @param {View} view @param {number} now */
  exchange(view, now) {
    const { next } = this;
    if (!next) return;
    const base = this.tiles.all.get(next.layer.key(next.layer.atlas.levels - 1, 0, 0));
    const standing = base && base.bytes >= 0 && base.lut >= next.lut && (!this.front || now - this.since > PATIENCE);
    if (!standing && !this.complete(next, view)) return;
    this.old = this.calm.matches || !this.front ? null : this.front;
    this.fadeFrom = now;
    this.front = next;
    this.next = null;
  }

  /** @param {Plate} plate @param {View} view @param {number} alpha */
  drawPlate(plate, view, alpha) {
    const { context, ratio } = this;
    const { layer, mosaic } = plate;
    const { level, range } = this.frameOf(view, layer);
    if (range.c0 >= range.c1 || range.r0 >= range.r1) return;
    mosaic.cover(level, range);
    const { w, h } = mosaic.used;
    const pixel = layer.atlas.pixelAt(level);
    const [x, y] = view.apply(layer.atlas.view.u[0] + range.c0 * SIDE * pixel, layer.atlas.view.v[1] - range.r0 * SIDE * pixel);
    const scale = pixel * view.scale * ratio;
    context.setTransform(scale, 0, 0, scale, x * ratio, y * ratio);
    context.imageSmoothingEnabled = scale < CRISP;
    context.globalAlpha = alpha;
    context.drawImage(mosaic.canvas, 0, 0, w, h, 0, 0, w, h);
    context.globalAlpha = 1;
    context.setTransform(1, 0, 0, 1, 0, 0);
  }

  /** The edge of the volume, a quiet hairline. @param {View} view */
  edge(view) {
    const atlas = this.wanted?.layer.atlas;
    if (!atlas) return;
    const { context, ratio } = this;
    const { u0, u1, v0, v1 } = atlas.bounds;
    const [x0, y0] = view.apply(u0, v1).map((x) => Math.round(x * ratio) - 0.5);
    const [x1, y1] = view.apply(u1, v0).map((x) => Math.round(x * ratio) + 0.5);
    context.strokeStyle = 'rgba(255, 255, 255, 0.2)';
    context.lineWidth = 1;
    context.strokeRect(x0, y0, x1 - x0, y1 - y0);
  }

  /**
   * The tile pixel under a place, at the level on screen.
   * @param {View} view @param {number} u @param {number} v
   * @returns {{key: string, column: number, row: number, level: number}|null} null outside the volume
   */
  pixelAt(view, u, v) {
    const layer = this.front?.layer;
    if (!layer) return null;
    const { level } = this.frameOf(view, layer);
    const at = layer.atlas.pixelOf(level, u, v);
    if (!at) return null;
    const key = layer.key(level, Math.floor(at.row / SIDE), Math.floor(at.column / SIDE));
    return { key, column: at.column % SIDE, row: at.row % SIDE, level };
  }

  /** The parts of tiles that are in view, for counting. @param {View} view */
  parts(view) {
    const layer = this.front?.layer;
    if (!layer) return [];
    const { level, range } = this.frameOf(view, layer);
    const { atlas } = layer;
    const pixel = atlas.pixelAt(level);
    const [columns, rows] = atlas.size(level);
    const clip = (/** @type {number} */ x, /** @type {number} */ top) => Math.min(Math.max(Math.round(x), 0), top);
    const x0 = clip((view.bounds.u0 - atlas.view.u[0]) / pixel, columns);
    const x1 = clip((view.bounds.u1 - atlas.view.u[0]) / pixel, columns);
    const y0 = clip((atlas.view.v[1] - view.bounds.v1) / pixel, rows);
    const y1 = clip((atlas.view.v[1] - view.bounds.v0) / pixel, rows);
    const parts = [];
    for (let row = range.r0; row < range.r1; row++) {
      for (let column = range.c0; column < range.c1; column++) {
        const [left, top] = [column * SIDE, row * SIDE];
        parts.push({
          key: layer.key(level, row, column),
          x0: Math.max(x0 - left, 0), x1: Math.min(x1 - left, SIDE),
          y0: Math.max(y0 - top, 0), y1: Math.min(y1 - top, SIDE),
        });
      }
    }
    return parts;
  }
}
