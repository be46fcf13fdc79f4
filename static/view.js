// The view of the map: a tiny immutable value. Gestures and flights only make new ones; everything on screen is drawn
// from it. In: a centre and a width in the atlas unit, the size of the map in CSS pixels. Out: places to pixels and back.

/** @typedef {{u0: number, u1: number, v0: number, v1: number}} Bounds a rectangle in the atlas unit */

export class View {
  /**
   * @param {number} u centre, to the right, atlas unit
   * @param {number} v centre, upwards, atlas unit
   * @param {number} width what the map shows from left to right, atlas unit
   * @param {number} w width of the map, CSS pixels
   * @param {number} h height of the map, CSS pixels
   */
  constructor(u, v, width, w, h) {
    for (const [name, value] of Object.entries({ u, v, width, w, h })) {
      if (!Number.isFinite(value)) throw new TypeError(`view: expected a finite number for ${name}, got ${value}`);
    }
    if (width <= 0 || w <= 0 || h <= 0) throw new RangeError(`view: expected sizes above zero, got ${width}, ${w}, ${h}`);
    this.u = u;
    this.v = v;
    this.width = width;
    this.w = w;
    this.h = h;
    Object.freeze(this);
  }

  /** CSS pixels per atlas unit. */
  get scale() {
    return this.w / this.width;
  }

  /** What the map shows from bottom to top, atlas unit. */
  get height() {
    return this.h / this.scale;
  }

  /** @returns {Bounds} */
  get bounds() {
    return {
      u0: this.u - this.width / 2,
      u1: this.u + this.width / 2,
      v0: this.v - this.height / 2,
      v1: this.v + this.height / 2,
    };
  }

  /**
   * Where a place is on the map.
   * @param {number} u
   * @param {number} v
   * @returns {[number, number]} CSS pixels from the top left corner of the map
   */
  apply(u, v) {
    return [this.w / 2 + (u - this.u) * this.scale, this.h / 2 - (v - this.v) * this.scale];
  }

  /**
   * The place under a pixel of the map.
   * @param {number} x
   * @param {number} y
   * @returns {[number, number]} atlas unit
   */
  invert(x, y) {
    return [this.u + (x - this.w / 2) / this.scale, this.v - (y - this.h / 2) / this.scale];
  }

  /** The map dragged by (dx, dy) CSS pixels. @param {number} dx @param {number} dy */
  panned(dx, dy) {
    return new View(this.u - dx / this.scale, this.v + dy / this.scale, this.width, this.w, this.h);
  }

  /**
   * Closer by a factor, with the place under (x, y) staying where it is.
   * @param {number} x
   * @param {number} y
   * @param {number} factor above 1 is closer
   */
  zoomed(x, y, factor) {
    const [u, v] = this.invert(x, y);
    const width = this.width / factor;
    const scale = this.w / width;
    return new View(u - (x - this.w / 2) / scale, v + (y - this.h / 2) / scale, width, this.w, this.h);
  }

  /** The same place and width on a map of another size. @param {number} w @param {number} h */
  resized(w, h) {
    return new View(this.u, this.v, this.width, w, h);
  }

  /** Another centre or width. @param {{u?: number, v?: number, width?: number}} change */
  with({ u = this.u, v = this.v, width = this.width }) {
    return new View(u, v, width, this.w, this.h);
  }

  /** @param {View} other */
  equals(other) {
    return (
      this.u === other.u && this.v === other.v && this.width === other.width && this.w === other.w && this.h === other.h
    );
  }
}

/** How far a view may go. */
export class Limits {
  /**
   * @param {Bounds} volume the rectangle of the atlas
   * @param {number} pixel side of the finest pixel, atlas unit
   */
  constructor(volume, pixel) {
    this.volume = volume;
    this.pixel = pixel;
    /** The closest view shows a pixel this many CSS pixels wide. */
    this.closest = 112;
  }

  /** The width at which the whole volume is just on screen, with a little room around. @param {View} view */
  widest(view) {
    const { u0, u1, v0, v1 } = this.volume;
    return Math.max(u1 - u0, ((v1 - v0) * view.w) / view.h) * 1.03;
  }

  /** @param {View} view */
  narrowest(view) {
    return Math.min((view.w * this.pixel) / this.closest, this.widest(view));
  }

  /** The nearest allowed view. @param {View} view */
  clamp(view) {
    const width = Math.min(Math.max(view.width, this.narrowest(view)), this.widest(view));
    const height = (width * view.h) / view.w;
    const { u0, u1, v0, v1 } = this.volume;
    const u = clampCentre(view.u, u0, u1, width);
    const v = clampCentre(view.v, v0, v1, height);
    return u === view.u && v === view.v && width === view.width ? view : view.with({ u, v, width });
  }

  /** The whole volume. @param {View} view */
  whole(view) {
    const { u0, u1, v0, v1 } = this.volume;
    return view.with({ u: (u0 + u1) / 2, v: (v0 + v1) / 2, width: this.widest(view) });
  }

  /** The map filled from edge to edge: the first thing anyone sees. @param {View} view */
  filled(view) {
    const { u0, u1, v0, v1 } = this.volume;
    const width = Math.min(u1 - u0, ((v1 - v0) * view.w) / view.h);
    return view.with({ u: (u0 + u1) / 2, v: (v0 + v1) / 2, width });
  }
}

/**
 * Far out the volume stays wholly on screen; close in any place can come to the middle; between the two the room for
 * the centre grows smoothly.
 * @param {number} centre @param {number} lo @param {number} hi @param {number} span
 */
function clampCentre(centre, lo, hi, span) {
  const size = hi - lo;
  const middle = (lo + hi) / 2;
  const room = span >= size ? (span - size) / 2 : (size / 2) * (1 - (span / size) ** 2);
  return Math.min(Math.max(centre, middle - room), middle + room);
}
