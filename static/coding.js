// How a number becomes a 16-bit code in a tile and back. Code 0 says "nothing here".
// log: value = 10^(low + step (code - 1)); linear: value = low + step (code - 1).

/** @typedef {{coding: 'log'|'linear', low: number, step: number}} Coding */

export const CODES = 65536;

/**
 * The number that a code stands for; NaN for nothing.
 * @param {number} code @param {Coding} c
 */
export function decode(code, c) {
  if (code === 0) return NaN;
  const x = c.low + c.step * (code - 1);
  return c.coding === 'log' ? 10 ** x : x;
}

/**
 * The place of a value on the scale of codes, with its fraction; NaN where there is none (a log coding and a value <= 0).
 * @param {number} value @param {Coding} c
 */
export function position(value, c) {
  const x = c.coding === 'log' ? Math.log10(value) : value;
  return (x - c.low) / c.step + 1;
}

/** The nearest code. @param {number} value @param {Coding} c */
export function encode(value, c) {
  const p = position(value, c);
  return Number.isFinite(p) ? Math.min(Math.max(Math.round(p), 1), CODES - 1) : 0;
}

/** All values of a coding by code; index 0 is 0, as a sum wants it. @param {Coding} c */
export function valueTable(c) {
  const table = new Float64Array(CODES);
  for (let code = 1; code < CODES; code++) table[code] = decode(code, c);
  return table;
}

/**
 * The coding used to colour a window of several slabs. A log coding spans more than a hundred decades and serves sums as
 * it is; a linear one is stretched over what a sum of that many slabs can reach. All else stays inside its own range.
 * @param {{kind: string, coding: string, low: number, step: number}} sheet
 * @param {number} slabs
 * @returns {Coding}
 */
export function windowCoding(sheet, slabs) {
  const { low, step } = sheet;
  if (sheet.coding === 'log') return { coding: 'log', low, step };
  if (sheet.kind !== 'sum' || slabs === 1) return { coding: 'linear', low, step };
  const high = low + step * (CODES - 2);
  const least = Math.min(low, slabs * low, 0);
  const most = Math.max(high, slabs * high, 0);
  return { coding: 'linear', low: least, step: (most - least) / (CODES - 2) };
}
