// Our own colour ramps, made in OKLab (Ottosson 2020, https://bottosson.github.io/posts/oklab/) from a few control points.
// Lightness never falls along a ramp, so that brighter always means more, also to eyes that see fewer colours.

/**
 * A control point: where along the ramp (0..1), lightness (0..1), chroma, hue in degrees.
 * @typedef {[number, number, number, number]} Stop
 */

/** Every ramp begins with the same dark, which is also the colour of nothing and of the room around the volume. */
const DARK = /** @type {Stop} */ ([0, 0.105, 0.012, 268]);

/** @type {Record<string, Stop[]>} names of the shore; the order is the order on screen */
const STOPS = {
  // night tide, sea glass, dry sand, first light
  strandline: [
    DARK,
    [0.16, 0.19, 0.05, 262],
    [0.36, 0.36, 0.078, 245],
    [0.54, 0.55, 0.075, 218],
    [0.7, 0.71, 0.055, 150],
    [0.83, 0.84, 0.085, 88],
    [0.93, 0.93, 0.075, 78],
    [1, 0.985, 0.022, 85],
  ],
  // cold shallows, weed, copper, shell
  kelpfire: [
    DARK,
    [0.14, 0.22, 0.045, 185],
    [0.36, 0.4, 0.075, 140],
    [0.55, 0.56, 0.11, 88],
    [0.72, 0.7, 0.14, 56],
    [0.86, 0.83, 0.11, 42],
    [1, 0.975, 0.02, 70],
  ],
  // dark flint, pearl, a warm point
  starwort: [
    DARK,
    [0.22, 0.27, 0.035, 285],
    [0.5, 0.51, 0.05, 275],
    [0.74, 0.73, 0.045, 255],
    [0.89, 0.88, 0.03, 100],
    [1, 0.99, 0.02, 95],
  ],
  // deep water to silver
  undertow: [
    DARK,
    [0.22, 0.23, 0.085, 293],
    [0.45, 0.42, 0.13, 285],
    [0.66, 0.62, 0.11, 268],
    [0.84, 0.81, 0.06, 235],
    [1, 0.975, 0.02, 200],
  ],
  // shade, moss, lichen on stone
  lichen: [
    DARK,
    [0.2, 0.26, 0.04, 180],
    [0.5, 0.49, 0.085, 155],
    [0.75, 0.72, 0.12, 125],
    [0.9, 0.88, 0.12, 110],
    [1, 0.97, 0.05, 105],
  ],
  // heath in August
  heather: [
    DARK,
    [0.25, 0.26, 0.08, 325],
    [0.5, 0.46, 0.12, 335],
    [0.72, 0.67, 0.12, 355],
    [0.88, 0.85, 0.07, 20],
    [1, 0.97, 0.02, 60],
  ],
  // no hue at all, for print
  shingle: [
    DARK,
    [1, 0.985, 0, 0],
  ],
};

export const RAMPS = Object.keys(STOPS);
export const STEPS = 1024;

/** @type {Map<string, Uint8ClampedArray>} */
const made = new Map();

/**
 * A ramp as STEPS sRGB triples.
 * @param {string} name one of RAMPS
 * @returns {Uint8ClampedArray} length 3 * STEPS
 */
export function ramp(name) {
  const known = made.get(name);
  if (known) return known;
  const stops = STOPS[name];
  if (!stops) throw new RangeError(`ramp: expected one of ${RAMPS.join(', ')}, got ${name}`);
  const table = new Uint8ClampedArray(3 * STEPS);
  for (let i = 0; i < STEPS; i++) table.set(toSrgb(lab(stops, i / (STEPS - 1))), 3 * i);
  made.set(name, table);
  return table;
}

/** The colour of code 0 and of the room around the volume, sRGB bytes. */
export const GROUND = /** @type {[number, number, number]} */ ([...ramp('shingle').subarray(0, 3)]);

/** @type {Map<string, Float64Array>} */
const lightnesses = new Map();

/** OKLab lightness along a ramp. @param {string} name @returns {Float64Array} length STEPS */
export function lightness(name) {
  const known = lightnesses.get(name) ?? Float64Array.from({ length: STEPS }, (_, i) => lab(STOPS[name], i / (STEPS - 1))[0]);
  lightnesses.set(name, known);
  return known;
}

/** A CSS gradient of the ramp, dark end first. @param {string} name @param {string} direction */
export function gradient(name, direction) {
  const table = ramp(name);
  const stops = [];
  for (let k = 0; k <= 16; k++) {
    const i = 3 * Math.round((k / 16) * (STEPS - 1));
    stops.push(`rgb(${table[i]} ${table[i + 1]} ${table[i + 2]})`);
  }
  return `linear-gradient(${direction}, ${stops.join(',')})`;
}

/**
 * OKLab along a ramp: monotone cubic Hermite (Fritsch & Carlson 1980) in each coordinate, so that lightness cannot overshoot.
 * @param {Stop[]} stops @param {number} t 0..1
 * @returns {[number, number, number]} L, a, b
 */
export function lab(stops, t) {
  const points = stops.map(([at, l, c, h]) => {
    const angle = (h * Math.PI) / 180;
    return { at, value: [l, c * Math.cos(angle), c * Math.sin(angle)] };
  });
  let k = 0;
  while (k < points.length - 2 && t > points[k + 1].at) k++;
  const [p, q] = [points[k], points[k + 1]];
  const width = q.at - p.at;
  const x = Math.min(Math.max((t - p.at) / width, 0), 1);
  const mix = [0, 1, 2].map((axis) => {
    const slope = (/** @type {number} */ i) => (points[i + 1].value[axis] - points[i].value[axis]) / (points[i + 1].at - points[i].at);
    const tangent = (/** @type {number} */ i) => {
      if (i === 0) return slope(0);
      if (i === points.length - 1) return slope(points.length - 2);
      const [before, after] = [slope(i - 1), slope(i)];
      return before * after <= 0 ? 0 : (2 * before * after) / (before + after);
    };
    const [h1, h2] = [x * x * (3 - 2 * x), x * x * (x - 1)];
    const h3 = x * (1 - x) ** 2;
    return p.value[axis] * (1 - h1) + q.value[axis] * h1 + width * (h3 * tangent(k) + h2 * tangent(k + 1));
  });
  return [mix[0], mix[1], mix[2]];
}

/**
 * OKLab to sRGB bytes; a colour outside the gamut loses chroma, never lightness.
 * @param {[number, number, number]} lab
 */
export function toSrgb([l, a, b]) {
  let keep = 1;
  let rgb = linear(l, a, b);
  while (keep > 0 && rgb.some((x) => x < -1e-4 || x > 1 + 1e-4)) {
    keep -= 0.02;
    rgb = linear(l, a * keep, b * keep);
  }
  return rgb.map(encoded);
}

/** Linear light to an sRGB byte (IEC 61966-2-1), not rounded. @param {number} x */
export function encoded(x) {
  const y = Math.min(Math.max(x, 0), 1);
  return 255 * (y <= 0.0031308 ? 12.92 * y : 1.055 * y ** (1 / 2.4) - 0.055);
}

/** An sRGB byte to linear light. @param {number} byte */
export function light(byte) {
  const y = byte / 255;
  return y <= 0.04045 ? y / 12.92 : ((y + 0.055) / 1.055) ** 2.4;
}

/** OKLab to linear sRGB, the matrices of Ottosson (2020). @param {number} L @param {number} a @param {number} b */
export function linear(L, a, b) {
  const l = (L + 0.3963377774 * a + 0.2158037573 * b) ** 3;
  const m = (L - 0.1055613458 * a - 0.0638541728 * b) ** 3;
  const s = (L - 0.0894841775 * a - 1.291485548 * b) ** 3;
  return [
    4.0767416621 * l - 3.3077115913 * m + 0.2309699292 * s,
    -1.2684380046 * l + 2.6097574011 * m - 0.3413193965 * s,
    -0.0041960863 * l - 0.7034186147 * m + 1.707614701 * s,
  ];
}
