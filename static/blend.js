// Two sheets in one picture. "hue": brightness from the first, hue from the second. "above": the second as light laid over
// the first. In: how, the tones and codings of both. Out: a palette, and the key that says what its colours mean.

import { CODES } from './coding.js';
import { lut, pack, steps } from './lut.js';
import { encoded, GROUND, light, lightness, linear, ramp, STEPS } from './ramps.js';

/** @typedef {import('./lut.js').Tone} Tone */
/** @typedef {import('./lut.js').Palette} Palette */
/** @typedef {{how: import('./atlas.js').How, tones: Tone[]}} Paint how a layer is coloured, the tones of its one or two sheets */
/** @typedef {{table: Uint32Array, across: number, rowOf(step: number): number, columnOf(step: number): number}} Colours row and column 0 are nothing */

/**
 * Hues in degrees of OKLab at even places from the low to the high end. Both ways round the circle climb in even steps from
 * blue to yellow, the axis that eyes without red or green cones keep.
 * @type {Record<string, number[]>}
 */
const WAYS = {
  dusk: [268, 310, 330, 350, 8, 26, 58],
  estuary: [264, 228, 208, 190, 166, 146, 110],
};
export const HUES = Object.keys(WAYS);

const LEVELS = 512;
const ACROSS = 96;
/** Where brightness ends in a blend: brighter than that no hue is left to see. */
const TOP = 0.87;
const CHROMA = 0.145;
/** What is left of the light of the first sheet below a second: room for it to shine. */
const DIM = 0.5;
const SOFT = 256;

/** @type {Map<string, Colours>} the last few */
const made = new Map();

/** @param {Paint} paint @param {import('./coding.js').Coding[]} codings @returns {Palette} */
export function palette({ how, tones }, codings) {
  if (!how || tones.length < 2) return lut(tones[0], codings[0]);
  const { table, across, rowOf, columnOf } = colours(how, tones);
  const [rows, columns] = [new Uint32Array(CODES), new Uint16Array(CODES)];
  steps(tones[0], codings[0]).forEach((k, code) => (rows[code] = across * rowOf(k)));
  steps(tones[1], codings[1]).forEach((k, code) => (columns[code] = columnOf(k)));
  rows[0] = columns[0] = 0;
  return { table, rows, columns };
}

/** The colours of two sheets by the steps of their ramps. @param {string} how @param {Partial<Tone>[]} tones @returns {Colours} */
export function colours(how, [{ ramp: first = '' }, { ramp: second = '', hues = '' }]) {
  const name = how === 'hue' ? `hue ${first} ${hues}` : `above ${first} ${second}`;
  const known = made.get(name) ?? (how === 'hue' ? hued(first, hues) : lit(first, second));
  made.delete(name);
  made.set(name, known);
  for (const old of made.keys()) if (made.size > 8) made.delete(old);
  return known;
}

/** @param {string} name of a ramp @param {string} hues @returns {Colours} */
function hued(name, hues) {
  const bright = lightness(name);
  const [least, most] = [bright[0], bright[STEPS - 1]];
  // The same field of colours for every ramp, as all begin with the same dark.
  const table = fields.get(hues) ?? field(least, hues);
  fields.set(hues, table);
  return {
    table,
    across: ACROSS + 1,
    rowOf: (step) => 1 + Math.round(((bright[step] - least) / (most - least)) * (LEVELS - 1)),
    columnOf: (step) => 1 + Math.round((step / (STEPS - 1)) * (ACROSS - 1)),
  };
}

/** @type {Map<string, Uint32Array>} by way */
const fields = new Map();

/** Hues across, lightness down, from the dark that ramps begin with. @param {number} least @param {string} hues */
function field(least, hues) {
  const across = ACROSS + 1;
  const table = new Uint32Array(across * (LEVELS + 1)).fill(pack(...GROUND));
  const way = WAYS[hues];
  for (let k = 0; k < across; k++) {
    const at = (Math.max(k - 1, 0) / (ACROSS - 1)) * (way.length - 1);
    const i = Math.min(Math.floor(at), way.length - 2);
    // The short way round, across 360 degrees.
    const turn = ((way[i + 1] - way[i] + 540) % 360) - 180;
    const angle = ((way[i] + turn * (at - i)) * Math.PI) / 180;
    const [a, b] = [Math.cos(angle), Math.sin(angle)];
    // Column 0, where the second sheet has nothing, has no hue.
    const most_chroma = Float64Array.from({ length: 65 }, (_, n) => (k ? reach((n / 64) * TOP, a, b) : 0));
    for (let row = 1; row <= LEVELS; row++) {
      const l = least + ((row - 1) / (LEVELS - 1)) * (TOP - least);
      const n = Math.min((l / TOP) * 64, 63.999);
      const low = Math.floor(n);
      // The dark end is the same dark whatever the hue.
      const c = Math.min((l - least) / 0.1, 1) * (most_chroma[low] + (most_chroma[low + 1] - most_chroma[low]) * (n - low));
      const [r, g, blue] = linear(l, c * a, c * b);
      table[across * row + k] = pack(Math.round(encoded(r)), Math.round(encoded(g)), Math.round(encoded(blue)));
    }
  }
  return table;
}

/** A CSS gradient of a way through the hues, at a middling brightness. @param {string} hues */
export function hueGradient(hues) {
  const { table, across } = colours('hue', [{ ramp: 'shingle' }, { hues }]);
  const stops = Array.from({ length: 12 }, (_, k) => {
    const colour = table[across * 360 + 1 + Math.round((k / 11) * (ACROSS - 1))];
    return `rgb(${colour & 255} ${(colour >> 8) & 255} ${(colour >> 16) & 255})`;
  });
  return `linear-gradient(90deg, ${stops.join(',')})`;
}

/** The most chroma that sRGB has at a lightness and a hue, up to CHROMA. @param {number} l @param {number} a @param {number} b */
function reach(l, a, b) {
  let [low, high] = [0, CHROMA];
  for (let i = 0; i < 9; i++) {
    const c = i ? (low + high) / 2 : high;
    if (linear(l, c * a, c * b).every((x) => x >= 0 && x <= 1)) low = c;
    else high = c;
    if (low === CHROMA) break;
  }
  return low;
}

/**
 * Light adds, so the sum is taken in linear light, where twice as many stars are twice as bright: in OKLab faint starlight
 * would lift a bright cloud as much as the dark beside it and turn it grey. What would overflow saturates, a + b - ab, so
 * that no channel clips before the others and a bright star keeps its own colour. Each sheet alone only ever adds.
 * @param {string} below @param {string} above names of ramps
 * @returns {Colours}
 */
function lit(below, above) {
  const across = SOFT + 1;
  const table = new Uint32Array(across * across);
  // The dark that all ramps begin with is the room's, and counts once: below.
  const ground = GROUND.map(light);
  const lights = (/** @type {string} */ name, /** @type {number} */ part, /** @type {number[]} */ base) => {
    const rgb = ramp(name);
    return Float64Array.from({ length: 3 * across }, (_, i) => {
      const [row, channel] = [Math.floor(i / 3), i % 3];
      const at = Math.round((Math.max(row - 1, 0) / (SOFT - 1)) * (STEPS - 1));
      return base[channel] + (row ? Math.max(part * (light(rgb[3 * at + channel]) - ground[channel]), 0) : 0);
    });
  };
  const [one, two] = [lights(below, DIM, ground), lights(above, 1, [0, 0, 0])];
  const bytes = Uint8Array.from({ length: 4096 }, (_, i) => Math.round(encoded(i / 4095)));
  const mix = (/** @type {number} */ a, /** @type {number} */ b) => bytes[Math.round((a + b - a * b) * 4095)];
  for (let row = 0; row < across; row++) {
    for (let k = 0; k < across; k++) {
      const [i, j] = [3 * row, 3 * k];
      table[across * row + k] = pack(mix(one[i], two[j]), mix(one[i + 1], two[j + 1]), mix(one[i + 2], two[j + 2]));
    }
  }
  const place = (/** @type {number} */ step) => 1 + Math.round((step / (STEPS - 1)) * (SOFT - 1));
  return { table, across, rowOf: place, columnOf: place };
}
