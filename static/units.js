// Numbers, units, lengths and angles as people read them. In: plain numbers in the atlas unit or the sheet's unit.
// Out: short strings with the unit, in the number format of the frame's language.

import { LOCALE, say } from './words.js';

/** @type {Record<string, string>} */
const SUPERSCRIPT = { '-': '⁻', 0: '⁰', 1: '¹', 2: '²', 3: '³', 4: '⁴', 5: '⁵', 6: '⁶', 7: '⁷', 8: '⁸', 9: '⁹', '.': '·' };

/** @param {string|number} digits */
const raised = (digits) => [...String(digits)].map((c) => SUPERSCRIPT[c] ?? c).join('');

/** @type {Map<string, Intl.NumberFormat>} */
const formats = new Map();

/** @param {number} x @param {Intl.NumberFormatOptions} options */
function format(x, options) {
  const key = JSON.stringify(options);
  const known = formats.get(key) ?? new Intl.NumberFormat(LOCALE, { useGrouping: false, ...options });
  formats.set(key, known);
  return known.format(x).replace('-', '−');
}

/**
 * A number to so many significant digits; far from one as a power of ten.
 * @param {number} x @param {number} [digits]
 */
export function number(x, digits = 4) {
  if (!Number.isFinite(x)) return '–';
  const size = Math.abs(x);
  if (size !== 0 && (size < 1e-3 || size >= 1e5)) {
    let power = Math.floor(Math.log10(size));
    let front = format(x / 10 ** power, { minimumFractionDigits: digits - 1, maximumFractionDigits: digits - 1 });
    if (/^−?10/.test(front)) front = format(x / 10 ** ++power, { minimumFractionDigits: digits - 1, maximumFractionDigits: digits - 1 });
    return `${front}${say('times')}10${raised(power)}`;
  }
  return format(x, { maximumSignificantDigits: digits });
}

/** A number as it is typed, all digits of it. @param {number} x */
export const plain = (x) => String(x).replace('.', fixed(0, 1)[1]);

/** A count. @param {number} n */
export const count = (n) => new Intl.NumberFormat(LOCALE).format(n);

/** Always so many decimals, so that a running number does not jump. @param {number} x @param {number} decimals */
export const fixed = (x, decimals) => format(x, { minimumFractionDigits: decimals, maximumFractionDigits: decimals });

/** A whole power of ten. @param {number} power */
export const decade = (power) => (power >= 0 && power <= 2 ? String(10 ** power) : `10${raised(power)}`);

/**
 * A unit as written in the atlas (`Msun / kpc2`) the way it is set in print.
 * @param {string|null|undefined} text
 */
export function unit(text) {
  if (!text) return '';
  return text
    .replace(/\b(solMass|M_sun|Msun)\b/g, 'M☉')
    .replace(/\b(solLum|L_sun|Lsun)\b/g, 'L☉')
    .replace(/([A-Za-z☉])\(?(-?\d+)\)?/g, (_, letter, power) => letter + raised(power))
    .replace(/\s*\/\s*/g, '/')
    .replace(/\*\*|\s+/g, ' ')
    .trim();
}

/** @param {number} value @param {string|null|undefined} unitText @param {number} [digits] */
export function quantity(value, unitText, digits = 4) {
  const u = unit(unitText);
  return u ? `${number(value, digits)} ${u}` : number(value, digits);
}

// Lengths ------------------------------------------------------------------------------------------------------------

/**
 * One way to read lengths: which unit, and how much of it an atlas unit is.
 * @typedef {object} Measure
 * @property {'comoving'|'proper'|'angle'|'plane'} name
 * @property {'length'|'angle'|'other'} scale
 * @property {number} factor atlas unit to Mpc, arcseconds, or the unit itself
 * @property {string} unit used by 'other'
 */

/** @type {Record<string, number>} */
const ARCSEC = { deg: 3600, degree: 3600, arcmin: 60, arcsec: 1, mas: 1e-3, rad: (180 / Math.PI) * 3600 };
/** @type {Record<string, number>} */
const MPC = { Gpc: 1e3, Mpc: 1, kpc: 1e-3, pc: 1e-6 };

/**
 * The measures that make sense for an atlas at an epoch.
 * @param {{coordinates: string, unit: string}} view
 * @param {{scale_factor: number|null, kpc_per_arcsec_comoving: number|null}} epoch
 * @returns {Measure[]}
 */
export function measures(view, epoch) {
  if (view.coordinates !== 'comoving') {
    if (ARCSEC[view.unit]) return [{ name: 'plane', scale: 'angle', factor: ARCSEC[view.unit], unit: '' }];
    if (MPC[view.unit]) return [{ name: 'plane', scale: 'length', factor: MPC[view.unit], unit: '' }];
    return [{ name: 'plane', scale: 'other', factor: 1, unit: view.unit ?? '' }];
  }
  const mpc = MPC[view.unit] ?? 1;
  /** @type {Measure[]} */
  const list = [{ name: 'comoving', scale: 'length', factor: mpc, unit: '' }];
  if (epoch.scale_factor) list.push({ name: 'proper', scale: 'length', factor: mpc * epoch.scale_factor, unit: '' });
  const kpc = epoch.kpc_per_arcsec_comoving;
  if (kpc && Number.isFinite(kpc)) list.push({ name: 'angle', scale: 'angle', factor: (1e3 * mpc) / kpc, unit: '' });
  return list;
}

/** Named units of a scale, coarse to fine: how much of the base unit, how written. @type {Record<string, [number, string][]>} */
const STEPS = {
  length: [[1e3, ' Gpc'], [1, ' Mpc'], [1e-3, ' kpc'], [1e-6, ' pc']],
  angle: [[3600, '°'], [60, '′'], [1, '″'], [1e-3, ' mas']],
};

/** What an angle's sign is called where it cannot be written. @type {Record<string, string>} */
const SPELT = { '°': 'deg', '′': 'arcmin', '″': 'arcsec' };

/**
 * A length, or an area, in the atlas unit, read in a measure: the number and its unit.
 * @param {number} size @param {Measure} measure @param {1|2} [power] 2 for an area
 * @returns {{value: number, name: string, plain: string}} the unit as set in print after the number, and as typed
 */
export function read(size, measure, power = 1) {
  const q = size * measure.factor ** power;
  if (measure.scale === 'other') {
    const plain = measure.unit + (power === 2 && measure.unit ? '2' : '');
    return { value: q, name: plain && ` ${unit(plain)}`, plain };
  }
  const steps = STEPS[measure.scale];
  // Areas keep a unit of length down to a hundredth of its square: the next smaller one is a million times less.
  const least = power === 2 && measure.scale === 'length' ? 0.01 : 0.99995;
  const [step, name] = steps.find(([s]) => Math.abs(q) >= least * s ** power) ?? steps[steps.length - 1];
  const plain = SPELT[name] ?? name.trim();
  return { value: q / step ** power, name: power === 2 ? ` ${plain}²` : name, plain: plain + (power === 2 ? '2' : '') };
}

/** A length in the atlas unit, read in a measure. @param {number} size @param {Measure} measure @param {number} [digits] */
export function length(size, measure, digits = 3) {
  const { value, name } = read(size, measure);
  return number(value, digits) + name;
}

/**
 * The unit that coordinates are read in, the same wherever one is.
 * @param {import('./view.js').Bounds} view the whole one, atlas unit @param {Measure} measure
 * @returns {{factor: number, name: string}} factor from the atlas unit
 */
export function coordinates({ u0, u1, v0, v1 }, measure) {
  const extent = Math.max(u1 - u0, v1 - v0);
  const { value, plain } = read(extent, measure);
  return { factor: value / extent, name: unit(plain) };
}

/**
 * Round lengths between two lengths: the rungs of the ladder.
 * @param {number} lo atlas unit @param {number} hi atlas unit @param {Measure} measure
 * @returns {{length: number, text: string, major: boolean}[]} longest first; major where a row of rungs begins
 */
export function rungs(lo, hi, measure) {
  /** @type {{length: number, text: string, major: boolean}[]} */
  const found = [];
  const [a, b] = [lo * measure.factor, hi * measure.factor];
  const add = (/** @type {number} */ q, /** @type {boolean} */ major) => {
    if (q < a * 0.9999 || q > b * 1.0001) return;
    const l = q / measure.factor;
    found.push({ length: l, text: length(l, measure, 3), major });
  };
  for (let power = Math.ceil(Math.log10(b)) + 1; power >= Math.floor(Math.log10(a)) - 1; power--) {
    if (measure.scale !== 'angle' || power < 0) for (const m of [5, 2, 1]) add(m * 10 ** power, m === 1);
  }
  if (measure.scale === 'angle') {
    for (const size of [3600, 60, 1]) {
      for (const m of size === 3600 ? [200, 100, 50, 20, 10, 5, 2, 1] : [30, 20, 10, 5, 2, 1]) add(m * size, m === 1 || m === 10);
    }
  }
  return found.sort((x, y) => y.length - x.length);
}

/** Decimals that name a place to a hundredth of a pixel and no more. @param {number} pixel atlas unit per CSS pixel */
export const decimals = (pixel) => Math.min(Math.max(Math.ceil(-Math.log10(pixel)), 0), 9);
