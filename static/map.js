// The map: one layer over all of it, or two under a divider, each in a pane of its own, at the same place and scale. In: a
// view, layers with their colours, where the divider stands. Out: pixels, and where on the tiles a place lies.

import { Pane } from './pane.js';
import { GROUND } from './ramps.js';

/** @typedef {import('./view.js').View} View */

export class MapSurface {
  /** @param {HTMLCanvasElement} canvas @param {import('./tiles.js').Tiles} tiles @param {() => void} wake asks for a frame */
  constructor(canvas, tiles, wake) {
    this.canvas = canvas;
    this.context = /** @type {CanvasRenderingContext2D} */ (canvas.getContext('2d', { alpha: false }));
    this.tiles = tiles;
    this.wake = wake;
    this.ratio = 1;
    this.calm = matchMedia('(prefers-reduced-motion: reduce)');
    /** @type {Pane[]} */ this.panes = [];
    this.panes.push(new Pane(this, [0, 1]));
    this.held = 0;
  }

  /** @param {number} w device pixels @param {number} h device pixels @param {number} ratio device pixels per CSS pixel */
  resize(w, h, ratio) {
    this.canvas.width = w;
    this.canvas.height = h;
    this.ratio = ratio;
  }

  /**
   * @param {{layer: import('./atlas.js').Layer, paint: import('./blend.js').Paint}[]} sides one or two
   * @param {number} divide where they meet, 0 to 1 of the width @param {number} held the side in hand
   */
  show(sides, divide, held) {
    while (this.panes.length < sides.length) this.panes.push(new Pane(this, [1, 1]));
    this.panes.length = sides.length;
    this.held = held;
    sides.forEach(({ layer, paint }, i) => {
      this.panes[i].part = sides.length === 1 ? [0, 1] : i ? [divide, 1] : [0, divide];
      this.panes[i].show(layer, paint);
    });
    this.wake();
  }

  /** The pane in hand. */
  get pane() {
    return this.panes[this.held] ?? this.panes[0];
  }

  /** What the side in hand shows. */
  get front() {
    return this.pane.front;
  }

  get recolouring() {
    return this.panes.some((pane) => pane.recolouring);
  }

  /** @param {import('./tiles.js').Tile} tile */
  arrived(tile) {
    for (const pane of this.panes) pane.arrived(tile);
    this.wake();
  }

  /**
   * Tells the tile store what this view needs, nearest to the middle first.
   * @param {View} view @param {boolean} [ahead] also what a next step would need
   * @param {import('./atlas.js').Layer[]} [following] a layer for each pane that is to be shown next
   */
  ask(view, ahead = false, following = []) {
    const needs = this.panes.map((pane, i) => pane.needs(view, ahead, following[i]));
    /** @type {Map<string, number>} */ const luts = new Map();
    this.panes.forEach(({ wanted }, i) => wanted && following[i] && luts.set(following[i].id, wanted.lut));
    this.panes.forEach(({ wanted }) => wanted && luts.set(wanted.layer.id, wanted.lut));
    const turns = (/** @type {import('./tiles.js').Place[][]} */ [one, two = []]) => {
      const list = [];
      for (let i = 0; i < Math.max(one.length, two.length); i++) list.push(...one.slice(i, i + 1), ...two.slice(i, i + 1));
      return list;
    };
    this.tiles.wish(turns(needs.map((n) => n.needed)), turns(needs.map((n) => n.more)), (layer) => luts.get(layer.id) ?? 0);
  }

  /**
   * Draws one frame.
   * @param {View} view @param {number} now ms
   * @returns {boolean} whether another frame is needed
   */
  render(view, now) {
    const { context, canvas } = this;
    context.setTransform(1, 0, 0, 1, 0, 0);
    context.fillStyle = `rgb(${GROUND.join(' ')})`;
    context.fillRect(0, 0, canvas.width, canvas.height);
    let more = false;
    for (const pane of this.panes) more = pane.render(context, view, now) || more;
    this.edge(view);
    return more;
  }

  /** The edge of the volume, a quiet hairline. @param {View} view */
  edge(view) {
    const atlas = this.pane.wanted?.layer.atlas;
    if (!atlas) return;
    const { context, ratio } = this;
    const { u0, u1, v0, v1 } = atlas.bounds;
    const [x0, y0] = view.apply(u0, v1).map((x) => Math.round(x * ratio) - 0.5);
    const [x1, y1] = view.apply(u1, v0).map((x) => Math.round(x * ratio) + 0.5);
    context.strokeStyle = 'rgba(255, 255, 255, 0.2)';
    context.lineWidth = 1;
    context.strokeRect(x0, y0, x1 - x0, y1 - y0);
  }

  /** The pane that shows a place. @param {View} view @param {number} u */
  paneAt(view, u) {
    return this.panes.find((pane) => u < pane.bounds(view).u1) ?? this.pane;
  }

  /** The parts of tiles that are in view on the side in hand, for counting. @param {View} view */
  parts(view) {
    return this.pane.parts(view);
  }
}
