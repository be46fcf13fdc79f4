// The tone that a sheet begins with: ends from its percentiles, a ramp by what it shows. In: a sheet. Out: a tone.

import { HUES } from './blend.js';
import { rounded } from './link.js';

/** @typedef {import('./atlas.js').Sheet} Sheet */

/** @param {Sheet[]} sheets of its epoch @param {Sheet} sheet @returns {import('./lut.js').Tone} */
export function usualTone(sheets, sheet) {
  return { ...usualEnds(sheet), curve: sheet.coding === 'log' ? 'log' : 'linear', ramp: usualRamp(sheets, sheet), hues: HUES[0] };
}

/** @param {Sheet} sheet */
function usualEnds(sheet) {
  const p = sheet.percentiles ?? {};
  const [least, most] = sheet.range ?? [1, 10];
  const log = sheet.coding === 'log';
  let lo = p[log ? '25' : '1'] ?? least;
  let hi = p[log ? '99.9' : '99'] ?? most;
  if (log) {
    // The brightest knots are far above any percentile of the area: leave them a third of the way to the top.
    if (most > hi) hi *= (most / hi) ** 0.35;
    if (!(lo > 0)) lo = hi / 1e4;
    // A sheet that is nearly empty, such as stars, would begin in the noise.
    lo = Math.max(lo, hi / 1e6);
  }
  if (!(lo < hi)) [lo, hi] = log ? [hi / 10, hi * 1.001] : [lo - 1, lo + 1];
  return { lo: rounded(lo, 3), hi: rounded(hi, 3) };
}

/** Each sheet its own ramp, by what it shows. @param {Sheet[]} sheets @param {Sheet} sheet */
function usualRamp(sheets, sheet) {
  const about = `${sheet.name} ${sheet.title} ${/** @type {any} */ (sheet).species ?? ''}`.toLowerCase();
  if (sheet.weight) return 'kelpfire';
  if (/star|stellar/.test(about)) return 'starwort';
  if (/dark|dm\b/.test(about)) return 'undertow';
  if (/gas/.test(about)) return 'strandline';
  return ['strandline', 'lichen', 'heather', 'undertow'][sheets.indexOf(sheet) % 4];
}
