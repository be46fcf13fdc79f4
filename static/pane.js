// One side of the map, or all of it: the layer that is shown and the one that is to come, their tiles and colours, drawn
// into a part of a canvas without ever going blank. In: a layer, how it is coloured, a view. Out: pixels, the tiles needed.

import { palette } from './blend.js';
import { Mosaic } from './mosaic.js';

/** @typedef {import('./atlas.js').Layer} Layer */
/** @typedef {import('./blend.js').Paint} Paint */
/** @typedef {import('./view.js').View} View */
/** @typedef {import('./tiles.js').Place} Place */
/**
 * A layer with its colours: those asked for, those last painted, their palette.
 * @typedef {{layer: Layer, paint: Paint, painted: Paint, lut: number, mosaic: Mosaic}} Plate
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

/** @param {Paint} a @param {Paint} b */
const same = (a, b) => JSON.stringify(a) === JSON.stringify(b);

export class Pane {
  /** @param {import('./map.js').MapSurface} map @param {[number, number]} part of the width of the map that it fills */
  constructor(map, part) {
    this.map = map;
    this.tiles = map.tiles;
    this.part = part;
    /** @type {Plate|null} */ this.front = null;
    /** @type {Plate|null} */ this.next = null;
    /** @type {Plate|null} */ this.old = null;
    this.since = 0;
    this.fadeFrom = 0;
    this.recolouring = false;
    this.rest = 0;
    this.checkColours = () => {};
  }

  get plates() {
    return [this.front, this.next, this.old].filter((plate) => plate !== null);
  }

  /** The layer that is, or is about to be, shown. */
  get wanted() {
    return this.next ?? this.front;
  }

  /** @param {Layer} layer @param {Paint} paint */
  show(layer, paint) {
    const { front, next } = this;
    if (front?.layer.id === layer.id) {
      this.next = null;
      front.paint = paint;
      if (!same(front.paint, front.painted)) this.recolour();
    } else if (next?.layer.id === layer.id) {
      if (!same(next.paint, paint)) Object.assign(next, { paint, painted: paint, lut: this.lut(layer, paint) });
    } else {
      this.next = { layer, paint, painted: paint, lut: this.lut(layer, paint), mosaic: new Mosaic(layer, this.tiles) };
      this.since = performance.now();
    }
  }

  /** The palette of a paint; both sides of a map share it, as they share the tiles. @param {Layer} layer @param {Paint} paint */
  lut(layer, paint) {
    const plates = this.map.panes.flatMap((pane) => pane.plates);
    const known = plates.find((plate) => plate.layer.id === layer.id && same(plate.painted, paint));
    if (known) return known.lut;
    const codings = layer.mate ? [layer.coding, layer.mate.coding] : [layer.coding];
    return this.tiles.addLut(palette(paint, codings), plates.map((plate) => plate.lut));
  }

  /** Takes over new colours for all that is in view at once. */
  async recolour() {
    if (this.recolouring) return;
    this.recolouring = true;
    let plate = this.front;
    while (this.front && !same(this.front.paint, this.front.painted)) {
      plate = this.front;
      const begin = performance.now();
      plate.lut = this.lut(plate.layer, plate.paint);
      plate.painted = plate.paint;
      const visible = new Set(plate.mosaic.cells.keys());
      this.tiles.repaint(plate.layer, plate.lut, visible);
      await Promise.race([this.coloured(visible, plate.lut), new Promise((done) => setTimeout(done, 1000))]);
      plate.mosaic.invalidate();
      performance.measure('recolour', { start: begin });
      this.map.wake();
      await new Promise((done) => requestAnimationFrame(done));
    }
    this.recolouring = false;
    this.map.wake();
    clearTimeout(this.rest);
    if (!plate) return;
    // The tiles that are out of sight follow when the hand rests.
    const { layer, lut } = plate;
    this.rest = window.setTimeout(() => this.tiles.repaint(layer, lut, null), 200);
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
    if (this.recolouring && this.front?.mosaic.cells.get(tile.key)) this.checkColours();
    else for (const plate of this.plates) plate.mosaic.arrived(tile);
  }

  /** The part of the view that is this side's. @param {View} view @returns {import('./view.js').Bounds} */
  bounds(view) {
    const { u0, v0, v1 } = view.bounds;
    const [a, b] = this.part;
    return { u0: u0 + a * view.width, u1: u0 + b * view.width, v0, v1 };
  }

  /** @param {View} view @param {Layer} layer */
  frameOf(view, layer) {
    const level = layer.atlas.levelFor(view.width / (view.w * this.map.ratio));
    const { u0, u1, v0, v1 } = this.bounds(view);
    // Smoothing reaches a pixel beyond the divider, perhaps to the next tile.
    const [left, right] = this.part.map((x) => (x > 0 && x < 1 ? layer.atlas.pixelAt(level) : 0));
    return { level, range: layer.atlas.range(level, { u0: u0 - left, u1: u1 + right, v0, v1 }) };
  }

  /**
   * The tiles that this view needs, nearest to the middle first, and those that a next step would need: the tiles around, and
   * the next coarser ones; under a divider all of the view.
   * @param {View} view @param {boolean} ahead @param {Layer} [following] that is to be shown next
   * @returns {{needed: Place[], more: Place[]}}
   */
  needs(view, ahead, following) {
    const plate = this.wanted;
    if (!plate) return { needed: [], more: [] };
    const { layer } = plate;
    const { level, range } = this.frameOf(view, layer);
    const needed = places(layer, level, range, view);
    /** @type {Place[]} */ const more = [];
    // The tile that stands in for all others comes first, where there are many of them.
    const base = { layer, level: layer.atlas.levels - 1, row: 0, column: 0 };
    if (level < layer.atlas.levels - 2) needed.unshift(base);
    else if (ahead) more.push(base);
    if (ahead && layer.names.length === 1) {
      const [across, down] = layer.atlas.grid(level);
      const { c0, c1, r0, r1 } = layer.atlas.range(level, view.bounds);
      const around = { c0: Math.max(c0 - 1, 0), c1: Math.min(c1 + 1, across), r0: Math.max(r0 - 1, 0), r1: Math.min(r1 + 1, down) };
      more.push(...places(layer, level, around, view));
      if (level + 1 < layer.atlas.levels) more.unshift(...places(layer, level + 1, layer.atlas.range(level + 1, view.bounds), view));
    }
    // In the colours of today, which are right where its codes mean the same.
    if (following && JSON.stringify(following.coding) === JSON.stringify(layer.coding)) more.push(...places(following, level, range, view));
    return { needed, more };
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
   * @param {CanvasRenderingContext2D} context @param {View} view @param {number} now ms
   * @returns {boolean} whether another frame is needed
   */
  render(context, view, now) {
    this.exchange(view, now);
    const { width, height } = context.canvas;
    const [left, right] = this.part.map((x) => Math.round(x * width));
    context.save();
    context.beginPath();
    context.rect(left, 0, right - left, height);
    context.clip();
    const faded = this.old ? Math.min((now - this.fadeFrom) / FADE, 1) : 1;
    if (this.old) this.drawPlate(context, this.old, view, 1);
    if (this.front) this.drawPlate(context, this.front, view, faded);
    context.restore();
    if (faded === 1) this.old = null;
    return Boolean(this.old || this.next || this.front?.mosaic.fresh.size);
  }

  /** @param {View} view @param {number} now */
  exchange(view, now) {
    const { next } = this;
    if (!next) return;
    const base = this.tiles.all.get(next.layer.key(next.layer.atlas.levels - 1, 0, 0));
    const standing = base && base.bytes >= 0 && base.lut >= next.lut && (!this.front || now - this.since > PATIENCE);
    if (!standing && !this.complete(next, view)) return;
    this.old = this.map.calm.matches || !this.front ? null : this.front;
    this.fadeFrom = now;
    this.front = next;
    this.next = null;
  }

  /** @param {CanvasRenderingContext2D} context @param {Plate} plate @param {View} view @param {number} alpha */
  drawPlate(context, plate, view, alpha) {
    const { ratio } = this.map;
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
    const bounds = this.bounds(view);
    const { atlas } = layer;
    const pixel = atlas.pixelAt(level);
    const [columns, rows] = atlas.size(level);
    const clip = (/** @type {number} */ x, /** @type {number} */ top) => Math.min(Math.max(Math.round(x), 0), top);
    const x0 = clip((bounds.u0 - atlas.view.u[0]) / pixel, columns);
    const x1 = clip((bounds.u1 - atlas.view.u[0]) / pixel, columns);
    const y0 = clip((atlas.view.v[1] - bounds.v1) / pixel, rows);
    const y1 = clip((atlas.view.v[1] - bounds.v0) / pixel, rows);
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
