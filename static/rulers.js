// Rulers along the left and the lower edge of the map: short lines at round coordinates of the view, read in the chosen
// measure. In: view, measure, cursor. Out: hairlines and numerals on the canvas of the markers.

import { lettered } from './tape.js';
import { coordinates, fixed } from './units.js';

/** @typedef {import('./view.js').View} View */

export class Rulers {
  /** @param {import('./state.js').State} state @param {() => import('./units.js').Measure} measureOf */
  constructor(state, measureOf) {
    this.state = state;
    this.measureOf = measureOf;
  }

  /**
   * @param {CanvasRenderingContext2D} context @param {View} view @param {number} em size of the numerals, CSS pixels
   * @param {[number, number]|null} cursor CSS pixels
   */
  draw(context, view, em, cursor) {
    const { atlas } = this.state;
    const { u0, u1, v0, v1 } = atlas.bounds;
    const [a, b] = atlas.view.axes ?? ['u', 'v'];
    const { factor, name } = coordinates(atlas.bounds, this.measureOf());
    context.font = `${em}px system-ui, sans-serif`;
    const scale = view.scale / factor;
    // Numerals stand at least so far apart; a place far in needs many of them.
    const digits = Math.ceil(Math.log10((Math.max(Math.abs(u1), Math.abs(v1)) * factor * scale) / em));
    const rough = Math.max(em * 6, em * (digits + 2)) / scale;
    const power = 10 ** Math.floor(Math.log10(rough));
    const step = ([1, 2, 5, 10].find((m) => m * power >= rough) ?? 10) * power;
    const parts = Math.round(step / 10 ** Math.floor(Math.log10(step * 1.0001))) === 2 ? 4 : 5;
    const places = Math.max(-Math.floor(Math.log10(step * 1.0001)), 0);
    const snap = (/** @type {number} */ x) => Math.round(x) + 0.5;
    const { bounds } = view;
    const sides = [
      { lo: Math.max(bounds.u0, u0), hi: Math.min(bounds.u1, u1), at: (/** @type {number} */ q) => view.apply(q, 0)[0], across: true },
      { lo: Math.max(bounds.v0, v0), hi: Math.min(bounds.v1, v1), at: (/** @type {number} */ q) => view.apply(0, q)[1], across: false },
    ];
    /** @type {[string, number, number][]} */
    const words = [];
    context.beginPath();
    for (const { lo, hi, at, across } of sides) {
      const mark = (/** @type {number} */ x, /** @type {number} */ reach) => {
        context.moveTo(across ? x : 0, across ? view.h : x);
        context.lineTo(across ? x : reach, across ? view.h - reach : x);
      };
      for (let n = Math.ceil(((lo * factor) / step) * parts); n <= ((hi * factor) / step) * parts; n++) {
        const x = snap(at(((n / parts) * step) / factor));
        const whole = n % parts === 0;
        mark(x, whole ? 9 : 4);
        // Room for the name of the axis at the far end, and for the other ruler in the corner.
        const room = across ? x > 3 * em && x < view.w - 5 * em : x > 2.5 * em && x < view.h - 3 * em;
        if (whole && room) words.push([fixed((n / parts) * step, places), across ? x : 12, across ? view.h - 9 - 0.6 * em : x]);
      }
      if (cursor) mark(snap(cursor[across ? 0 : 1]), 16);
    }
    for (const [style, width] of /** @type {[string, number][]} */ ([['rgb(3 4 7 / 0.5)', 3], ['rgb(255 252 244 / 0.75)', 1]])) {
      context.strokeStyle = style;
      context.lineWidth = width;
      context.stroke();
    }
    context.textBaseline = 'middle';
    context.globalAlpha = 0.85;
    for (const [text, x, y] of words) {
      context.textAlign = x === 12 ? 'left' : 'center';
      lettered(context, text, x, y);
    }
    context.textAlign = 'right';
    lettered(context, `${a}, ${name}`, view.w - 8, view.h - 9 - 0.6 * em);
    context.textAlign = 'left';
    lettered(context, `${b}, ${name}`, 12, 0.9 * em);
    context.globalAlpha = 1;
  }
}
