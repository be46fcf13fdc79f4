// From a tone (dark end, bright end, curve, ramp) and a coding to a table with one colour for each code. Recolouring a
// tile is one look-up per pixel, so no tile is fetched again when the tone changes.

import { CODES, decode, position } from './coding.js';
import { GROUND, ramp, STEPS } from './ramps.js';

/** @typedef {{lo: number, hi: number, curve: string, ramp: string, hues: string}} Tone ends in the sheet's unit; hues where it gives the hue */
/** @typedef {import('./coding.js').Coding} Coding */
/**
 * Colours by code; with two sheets table[rows[first] + columns[second]].
 * @typedef {{table: Uint32Array, rows: Uint32Array|null, columns: Uint16Array|null}} Palette
 */

/** The curves that a coding can carry; signed values have no logarithm. @param {Coding} c @returns {('log'|'asinh'|'linear')[]} */
export function curves(c) {
  return c.coding === 'log' ? ['log', 'asinh', 'linear'] : ['linear', 'asinh'];
}

/** The bend of the asinh curve (Lupton, Gunn & Szalay 1999): linear near the dark end, logarithmic near the bright one. */
const BEND = 60;

/**
 * Where a value falls on the ramp.
 * @param {number} value @param {Tone} tone
 * @returns {number} 0 at the dark end, 1 at the bright end; not clipped
 */
export function shade(value, { lo, hi, curve }) {
  if (curve === 'log') return Math.log(value / lo) / Math.log(hi / lo);
  const x = (value - lo) / (hi - lo);
  return curve === 'asinh' ? Math.asinh(BEND * x) / Math.asinh(BEND) : x;
}

/** The row of the ramp for a shade. @param {number} t */
export function step(t) {
  return Math.round(Math.min(Math.max(t, 0), 1) * (STEPS - 1));
}

/**
 * The row of the ramp for each code; 0 also for nothing. Every curve climbs from the dark end to the bright one, so only the
 * codes between them need a look.
 * @param {Tone} tone @param {Coding} c
 * @returns {Uint16Array} length 65536
 */
export function steps(tone, c) {
  const table = new Uint16Array(CODES);
  const place = (/** @type {number} */ value) => Math.min(Math.max(Math.ceil(position(value, c)), 1), CODES);
  const [first, last] = [place(tone.lo), place(tone.hi)];
  for (let code = first; code < last; code++) table[code] = step(shade(decode(code, c), tone));
  return table.fill(STEPS - 1, last);
}

/**
 * One colour for each code.
 * @param {Tone} tone @param {Coding} c
 * @returns {Palette}
 */
export function lut(tone, c) {
  const rgb = ramp(tone.ramp);
  const table = new Uint32Array(CODES);
  // Plain loops: from() with a function is ten times as slow, and this is done at every step of a handle.
  steps(tone, c).forEach((k, code) => (table[code] = pack(rgb[3 * k], rgb[3 * k + 1], rgb[3 * k + 2])));
  table[0] = pack(...GROUND);
  return { table, rows: null, columns: null };
}

/** The bytes R, G, B, A of a canvas as a little-endian number. @param {number} r @param {number} g @param {number} b */
export function pack(r, g, b) {
  return (0xff000000 | (b << 16) | (g << 8) | r) >>> 0;
}
