// Far in, where a pixel of the file is wide enough, its number is written on it. In: view, tiles. Out: lines and numbers
// on the canvas of the markers.

import { shade, step } from './lut.js';
import { ramp } from './ramps.js';
import { number } from './units.js';
import { say } from './words.js';

/** Sides of a pixel, CSS pixels, from which lines and numbers are drawn; a power of ten has its own line up to the second. */
const LINES = 32;
const ONE_LINE = 64;

export class PixelGrid {
  /** @param {import('./map.js').MapSurface} map @param {() => void} wake */
  constructor(map, wake) {
    this.map = map;
    this.wake = wake;
    this.key = '';
    /** @type {{x: number, y: number, values: Float64Array, across: number}[]} pixel of level 0 at which a block begins */
    this.blocks = [];
  }

  /** @param {CanvasRenderingContext2D} context @param {import('./view.js').View} view */
  draw(context, view) {
    const { front } = this.map;
    const layer = front?.layer;
    if (!layer) return;
    const side = layer.atlas.pixel * view.scale;
    if (side < LINES) return;
    const { atlas } = layer;
    const [columns, rows] = atlas.size(0);
    const clip = (/** @type {number} */ x, /** @type {number} */ top) => Math.min(Math.max(x, 0), top);
    const bounds = this.map.pane.bounds(view);
    const x0 = clip(Math.floor((bounds.u0 - atlas.view.u[0]) / atlas.pixel), columns);
    const x1 = clip(Math.ceil((bounds.u1 - atlas.view.u[0]) / atlas.pixel), columns);
    const y0 = clip(Math.floor((atlas.view.v[1] - bounds.v1) / atlas.pixel), rows);
    const y1 = clip(Math.ceil((atlas.view.v[1] - bounds.v0) / atlas.pixel), rows);
    const [left, top] = view.apply(atlas.view.u[0], atlas.view.v[1]);
    context.strokeStyle = `rgb(0 0 0 / ${Math.min((side - LINES) / LINES, 1) * 0.35})`;
    context.lineWidth = 1;
    context.beginPath();
    for (let x = x0; x <= x1; x++) {
      context.moveTo(left + x * side, top + y0 * side);
      context.lineTo(left + x * side, top + y1 * side);
    }
    for (let y = y0; y <= y1; y++) {
      context.moveTo(left + x0 * side, top + y * side);
      context.lineTo(left + x1 * side, top + y * side);
    }
    context.stroke();
    const key = [layer.id, x0, x1, y0, y1].join();
    if (key !== this.key) this.fetch(key, layer, x0, x1, y0, y1);
    context.textAlign = 'center';
    context.textBaseline = 'middle';
    const size = side < ONE_LINE ? Math.max(side / 4.4, 8.5) : side / 6.2;
    context.font = `${size.toFixed(1)}px system-ui, sans-serif`;
    context.globalAlpha = Math.min((side - LINES) / 8 + 0.2, 1);
    const [tone] = front.painted.tones;
    const colours = ramp(tone.ramp);
    const times = say('times');
    const tight = times.trim();
    for (const { x, y, values, across } of this.blocks) {
      values.forEach((value, i) => {
        if (Number.isNaN(value)) return;
        const [cx, cy] = [left + (x + (i % across) + 0.5) * side, top + (y + Math.floor(i / across) + 0.5) * side];
        const [text, power] = side < ONE_LINE ? number(value, 3).split(times) : [number(value, 3).replace(times, tight)];
        const k = 3 * step(shade(value, tone));
        context.fillStyle = colours[k] + 2 * colours[k + 1] + colours[k + 2] > 460 ? '#08090c' : '#f4f2ec';
        if (!power) return context.fillText(text, cx, cy);
        context.fillText(text, cx, cy - 0.55 * size);
        context.fillText(tight + power, cx, cy + 0.6 * size);
      });
    }
    context.globalAlpha = 1;
  }

  /** @param {string} key @param {import('./atlas.js').Layer} layer @param {number} x0 @param {number} x1 @param {number} y0 @param {number} y1 */
  async fetch(key, layer, x0, x1, y0, y1) {
    this.key = key;
    const { tile } = layer.atlas;
    const reads = [];
    for (let row = Math.floor(y0 / tile); row * tile < y1; row++) {
      for (let column = Math.floor(x0 / tile); column * tile < x1; column++) {
        const [x, y] = [Math.max(x0, column * tile), Math.max(y0, row * tile)];
        const [across, down] = [Math.min(x1, (column + 1) * tile) - x, Math.min(y1, (row + 1) * tile) - y];
        reads.push(
          this.map.tiles
            .read(layer.key(0, row, column), x - column * tile, y - row * tile, across, down)
            .then((values) => (values ? { x, y, values, across } : null)),
        );
      }
    }
    const blocks = await Promise.all(reads);
    if (this.key !== key) return;
    this.blocks = blocks.filter((b) => b !== null);
    // A tile that is not there yet is asked for again at the next frame.
    if (this.blocks.length < blocks.length) this.key = '';
    this.wake();
  }
}
