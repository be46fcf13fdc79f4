// The key beside the tone's axis: what the colours mean. One sheet: its ramp laid along the axis. Two: a field of colours, the
// sheet in hand along the axis, the other across it from its low to its high end. In: a paint, the axis. Out: pixels.

import { colours } from './blend.js';
import { pack, shade, step } from './lut.js';
import { ramp, STEPS } from './ramps.js';

/** How wide the key is, pixels. */
const ONE = 9;
const TWO = 40;

/**
 * @param {HTMLCanvasElement} canvas @param {number} rows device pixels
 * @param {import('./blend.js').Paint} paint @param {boolean} second whether the second sheet is the one along the axis
 * @param {(row: number) => number} value that the axis has at a row
 */
export function drawKey(canvas, rows, { how, tones }, second, value) {
  const width = how ? TWO : ONE;
  Object.assign(canvas, { width, height: rows });
  const context = /** @type {CanvasRenderingContext2D} */ (canvas.getContext('2d'));
  const picture = context.createImageData(width, rows);
  const out = new Uint32Array(picture.data.buffer);
  const along = tones[second ? 1 : 0];
  const colour = how ? mixed(how, tones, second, width) : plain(along.ramp);
  for (let i = 0; i < rows; i++) {
    const t = shade(value(i), along);
    // Beyond its ends the key goes on as a thread: all of that is one colour.
    for (let x = t < 0 || t > 1 ? width - 2 : 0; x < width; x++) out[i * width + x] = colour(step(t), x);
  }
  context.putImageData(picture, 0, 0);
}

/** @param {string} name @returns {(k: number, x: number) => number} */
function plain(name) {
  const rgb = ramp(name);
  return (k) => pack(rgb[3 * k], rgb[3 * k + 1], rgb[3 * k + 2]);
}

/** @param {string} how @param {import('./lut.js').Tone[]} tones @param {boolean} second @param {number} width @returns {(k: number, x: number) => number} */
function mixed(how, tones, second, width) {
  const { table, across, rowOf, columnOf } = colours(how, tones);
  return (k, x) => {
    const other = Math.round((x / (width - 1)) * (STEPS - 1));
    return second ? table[across * rowOf(other) + columnOf(k)] : table[across * rowOf(k) + columnOf(other)];
  };
}
