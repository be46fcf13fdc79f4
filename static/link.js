// A view written as a link and read back: the part after # in the address, in physical units, so that a person can read
// and edit it. #u=31.2&v=8.4&width=2.5&sheet=gas&depth=25:50&tone=1e5:3e8. What is as usual is left out.
// Words about one of several carry its name: tone.stars=1e3:1e8, beside.epoch=z2.00.

/** @typedef {'epoch'|'sheet'|'hue'|'above'|'curve'|'ramp'|'hues'|'toned'|'beside'|'hand'|'object'|'lengths'|'markers'} Named */
/**
 * Lengths in the atlas unit, tones in their sheet's, the census in that of its column; `divide` is a part of the width.
 * @typedef {{u?: number, v?: number, width?: number, divide?: number, depth?: [number, number], tone?: [number, number], census?: [number, number]}
 *   & {line?: [number, number][], outline?: [number, number][]} & Partial<Record<Named|`beside.${'atlas'|'epoch'|'hue'|'above'}`, string>>} Linked
 */

const NUMBERS = ['u', 'v', 'width', 'divide'];
const PAIRS = ['depth', 'tone', 'census'];
const PATHS = ['line', 'outline'];
const NAMES = ['epoch', 'sheet', 'hue', 'above', 'curve', 'ramp', 'hues', 'toned', 'beside', 'hand', 'object', 'lengths', 'markers'];
const ORDER = ['u', 'v', 'width', 'epoch', 'sheet', 'hue', 'above', 'depth', 'tone', 'curve', 'ramp', 'hues', 'toned', 'divide', 'beside', 'hand', 'census', 'object', 'lengths', 'markers', 'line', 'outline'];
const NAMED = ['tone', 'curve', 'ramp', 'hues', 'beside'];
/** Places in a line or an outline, at most: as many as the server takes. */
const MOST_PLACES = 1000;

/** The word that a key begins with, before the name of what it is about. @param {string} key */
function word(key) {
  const dot = key.indexOf('.');
  return dot < 0 ? key : NAMED.includes(key.slice(0, dot)) ? key.slice(0, dot) : '';
}

/**
 * @param {Linked} view
 * @returns {string} beginning with #
 */
export function write(view) {
  const parts = [];
  const place = (/** @type {[string, any]} */ [key]) => ORDER.indexOf(word(key));
  /** @type {[string, any][]} */ const entries = Object.entries(view);
  for (const [key, value] of entries.sort((a, b) => place(a) - place(b))) {
    if (value === undefined || value === null) continue;
    const pair = (/** @type {number[]} */ numbers) => numbers.map(short).join(':');
    const text = PATHS.includes(key) ? value.map(pair).join(',') : Array.isArray(value) ? pair(value) : typeof value === 'number' ? short(value) : escape(value);
    parts.push(`${escape(key)}=${text}`);
  }
  return `#${parts.join('&')}`;
}

/**
 * Reads what it can; what it cannot is named and left out.
 * @param {string} fragment with or without #
 * @returns {{view: Linked, bad: string[]}}
 */
export function read(fragment) {
  /** @type {Linked & Record<string, any>} */
  const view = {};
  const bad = [];
  for (const part of fragment.replace(/^#/, '').split('&')) {
    if (!part) continue;
    const cut = part.indexOf('=');
    const key = unescape(part.slice(0, cut));
    const kind = word(key);
    const text = unescape(part.slice(cut + 1));
    if (NUMBERS.includes(kind)) {
      const x = real(text);
      if (x === null || (key === 'width' && x <= 0) || (key === 'divide' && (x < 0 || x > 1))) bad.push(part);
      else view[key] = x;
    } else if (PAIRS.includes(kind)) {
      const pair = text.split(':').map(real);
      if (pair.length !== 2 || pair[0] === null || pair[1] === null || pair[0] >= pair[1]) bad.push(part);
      else view[key] = /** @type {[number, number]} */ (pair);
    } else if (PATHS.includes(kind)) {
      const places = text.split(',').map((place) => place.split(':').map(real));
      const whole = places.every((place) => place.length === 2 && !place.includes(null));
      const least = kind === 'outline' ? 3 : 2;
      if (!whole || places.length < least || places.length > MOST_PLACES) bad.push(part);
      else view[key] = places;
    } else if (NAMES.includes(kind) && text) view[key] = text;
    else bad.push(part);
  }
  // A long one is told by its beginning.
  return { view, bad: bad.map((part) => (part.length > 40 ? `${part.slice(0, 39)}…` : part)) };
}

/** A number rounded so that write() and read() give it back. @param {number} x @param {number} digits significant */
export const rounded = (x, digits) => Number(x.toPrecision(digits));

/**
 * Centre and width to what a link says of them: a hundredth of a CSS pixel, or less.
 * @param {{u: number, v: number, width: number, w: number}} view
 */
export function settled({ u, v, width, w }) {
  const places = Math.min(Math.max(2 + Math.ceil(-Math.log10(width / w)), 0), 12);
  return { u: Number(u.toFixed(places)), v: Number(v.toFixed(places)), width: rounded(width, 7) };
}

/** @param {number} x */
function short(x) {
  const plain = String(x);
  const size = Math.abs(x);
  if (size !== 0 && (size >= 1e6 || size < 1e-4)) {
    const power = x.toExponential().replace('e+', 'e');
    if (power.length < plain.length) return power;
  }
  return plain;
}

/** @param {string} text */
function real(text) {
  const x = text.trim() === '' ? NaN : Number(text);
  return Number.isFinite(x) ? x : null;
}

/** @param {string} text */
const escape = (text) => encodeURIComponent(text);

/** @param {string} text */
function unescape(text) {
  try {
    return decodeURIComponent(text);
  } catch {
    return '';
  }
}
