// Objects of the catalogue on the map: thin open rings as large as the object, thinned so that they never pile up; the one
// chosen is tied by a line to its columns in the right margin. In: objects in view. Out: rings, a note, the choice.

import { make } from './dom.js';
import { number, unit } from './units.js';
import { say } from './words.js';

/** @typedef {import('./objects.js').Found} Found */
/** @typedef {import('./view.js').View} View */
/** @typedef {{found: Found, x: number, y: number, r: number}} Ring CSS pixels */

const LEAST = 5;
const MOST_RINGS = 90;
/** Rings keep this far apart, or as far as their radii ask, up to a bound: a dwarf inside a cluster is still shown. */
const APART = 40;
const APART_MOST = 96;
/** Half the opening of a ring, towards the right margin. */
const GAP = 0.42;

export class Markers {
  /**
   * @param {HTMLCanvasElement} canvas @param {HTMLElement} note @param {import('./state.js').State} state
   * @param {{go(found: Found): void, wake(): void}} does
   */
  constructor(canvas, note, state, does) {
    this.canvas = canvas;
    this.context = /** @type {CanvasRenderingContext2D} */ (canvas.getContext('2d'));
    this.note = note;
    this.state = state;
    this.does = does;
    /** @type {Found[]} heaviest first */ this.list = [];
    /** @type {Found|null} */ this.chosen = null;
    /** @type {Ring[]} */ this.rings = [];
    /** @type {Ring|null} */ this.under = null;
    this.ratio = 1;
  }

  /** @param {number} w device pixels @param {number} h device pixels @param {number} ratio */
  resize(w, h, ratio) {
    this.canvas.width = w;
    this.canvas.height = h;
    this.ratio = ratio;
  }

  /** @param {Found} found */
  static name(found) {
    return String(found.id ?? `#${found.row}`);
  }

  /** @param {Found[]} list */
  setList(list) {
    this.list = list;
    this.choose(this.state.object);
  }

  /** The object of this name, if it is among those known. @param {string|null} name @returns {boolean} whether it was found */
  choose(name) {
    const known = this.chosen && Markers.name(this.chosen) === name ? this.chosen : null;
    const found = name === null ? null : (known ?? this.list.find((o) => Markers.name(o) === name) ?? null);
    if (found !== this.chosen) {
      this.chosen = found;
      this.describe();
    }
    this.does.wake();
    return name === null || found !== null;
  }

  /** @param {Found} found */
  adopt(found) {
    this.chosen = found;
    this.describe();
    this.does.wake();
  }

  /** The next object in view by rank. @param {number} by @param {View} view */
  walk(by, view) {
    const { u0, u1, v0, v1 } = view.bounds;
    const seen = this.list.filter(({ u, v }) => u >= u0 && u <= u1 && v >= v0 && v <= v1);
    if (!seen.length) return;
    const chosen = this.chosen && Markers.name(this.chosen);
    const at = chosen ? seen.findIndex((o) => Markers.name(o) === chosen) : by > 0 ? -1 : 0;
    this.state.set({ object: Markers.name(seen[(at + by + seen.length) % seen.length]) });
  }

  /** @param {number|null} x CSS pixels @param {number|null} y */
  ringAt(x, y) {
    if (x === null || y === null) return null;
    let best = null;
    let least = 14;
    for (const ring of this.rings) {
      const away = Math.hypot(ring.x - x, ring.y - y);
      const d = Math.min(Math.abs(away - ring.r), ring.r < 24 ? away : Infinity);
      if (d < least) [best, least] = [ring, d];
    }
    return best;
  }

  /** @param {number|null} x @param {number|null} y @returns {boolean} whether the pointer is on a ring */
  hover(x, y) {
    const ring = this.ringAt(x, y);
    if (ring?.found !== this.under?.found) {
      this.under = ring;
      this.does.wake();
    }
    return Boolean(ring);
  }

  /** @param {number} x @param {number} y @returns {boolean} whether a ring was there */
  tap(x, y) {
    const ring = this.ringAt(x, y);
    if (!ring) return false;
    const name = Markers.name(ring.found);
    this.state.set({ object: name === this.state.object ? null : name });
    return true;
  }

  /** Which rings are drawn in a view, in the order of rank; the chosen one always. @param {View} view @returns {Ring[]} */
  thinned(view) {
    /** @type {Ring[]} */
    const kept = [];
    const { chosen } = this;
    const order = chosen ? [chosen, ...this.list.filter((o) => Markers.name(o) !== Markers.name(chosen))] : this.list;
    const [from, to] = this.state.ownPart.map((x) => x * view.w);
    for (const found of order) {
      const [x, y] = view.apply(found.u, found.v);
      if (x < from || x > to) continue;
      const r = Math.max((found.size ?? 0) * view.scale, LEAST);
      if (x < -r || y < -r || x > view.w + r || y > view.h + r) continue;
      const near = (/** @type {Ring} */ o) => Math.hypot(o.x - x, o.y - y) < Math.max(APART, Math.min(o.r + r + 6, APART_MOST));
      if (kept.some(near)) continue;
      kept.push({ found, x, y, r });
      if (kept.length >= MOST_RINGS) break;
    }
    return kept;
  }

  /** @param {View} view @param {(context: CanvasRenderingContext2D) => void} below what is drawn under the rings */
  draw(view, below) {
    const { context, ratio, canvas } = this;
    context.setTransform(1, 0, 0, 1, 0, 0);
    context.clearRect(0, 0, canvas.width, canvas.height);
    context.setTransform(ratio, 0, 0, ratio, 0, 0);
    below(context);
    this.rings = this.state.markers ? this.thinned(view) : [];
    context.lineWidth = 1;
    for (const ring of this.rings) {
      const chosen = ring.found === this.chosen;
      const strong = chosen || ring.found === this.under?.found;
      context.strokeStyle = strong ? 'rgb(255 252 244)' : 'rgb(250 246 236 / 0.5)';
      context.lineWidth = chosen ? 1.5 : 1;
      context.beginPath();
      context.arc(ring.x, ring.y, ring.r, GAP, 2 * Math.PI - GAP);
      context.stroke();
      if (chosen) this.tie(ring, view);
    }
  }

  /** The thin line from the opening of the chosen ring to its note. @param {Ring} ring @param {View} view */
  tie({ x, y, r }, view) {
    const { context, note, canvas } = this;
    // Hidden, or behind the note of the tape.
    if (!note.offsetWidth) return;
    const box = note.getBoundingClientRect();
    const map = canvas.getBoundingClientRect();
    const below = box.width > 0.8 * view.w;
    const top = Math.min(Math.max(y - 16, 12), Math.max(view.h - box.height - 12, 12));
    if (!below) note.style.transform = `translateY(${Math.round(top)}px)`;
    else note.style.transform = '';
    const end = below ? [24, box.top - map.top] : [box.left - map.left + 2, top + 16];
    context.lineWidth = 1;
    context.strokeStyle = 'rgb(255 252 244 / 0.6)';
    const way = Math.hypot(end[0] - x, end[1] - y);
    if (way <= r) return;
    context.beginPath();
    context.moveTo(x + ((end[0] - x) * r) / way, y + ((end[1] - y) * r) / way);
    context.lineTo(end[0], end[1]);
    context.stroke();
  }

  /** The columns of the chosen object. */
  describe() {
    const { chosen, note, state } = this;
    note.hidden = !chosen;
    note.replaceChildren();
    const { catalogue } = state.epoch;
    if (!chosen || !catalogue) return;
    const list = make('dl', {});
    for (const { name, unit: of } of catalogue.columns) {
      if (name === catalogue.id || !(name in chosen.columns)) continue;
      const value = chosen.columns[name];
      const text = typeof value === 'number' ? number(value, 5) : value === null ? '–' : String(value);
      list.append(make('dt', {}, name.replaceAll('_', ' ')), make('dd', {}, [text, unit(of)].filter(Boolean).join(' ')));
    }
    const word = (/** @type {'object_go'|'object_close'} */ key, /** @type {() => void} */ click) => make('button.word.act', { type: 'button', click }, say(key));
    note.append(
      make('h2', {}, /^\D/.test(Markers.name(chosen)) ? Markers.name(chosen) : say('object', { id: Markers.name(chosen) })),
      list,
      make('div.words', {}, word('object_go', () => this.does.go(chosen)), word('object_close', () => state.set({ object: null }))),
    );
  }
}
