// The tape: a thread laid on the map from knot to knot, or drawn free-hand; back at its first knot it becomes an outline.
// In: hands and keys on the map. Out: what is laid, in the state, and lines on the canvas of the markers.

import { length, rungs } from './units.js';
import { say } from './words.js';

/** @typedef {[number, number]} Place */
/** @typedef {{points: Place[], closed: boolean}} Laid places in the atlas unit */
/** @typedef {import('./view.js').View} View */
/**
 * @typedef {object} Does
 * @property {() => View} view @property {() => import('./units.js').Measure} measure @property {() => void} wake
 * @property {(text: string) => void} hint a line that stays; empty takes it away
 * @property {(taken: boolean) => void} taken
 */

/** How near a place counts as a knot, CSS pixels: for a mouse, for a finger. */
const NEAR = 9;
const NEAR_TOUCH = 22;
/** With more knots than these, as a free hand makes, only the ends are shown. */
const FEW = 40;
/** So many points at most make a link that can still be sent, and an outline that the server takes. */
const MOST = 160;
const HAND = '#d9e021';
const THREAD = 'rgb(255 252 244)';
const SHADE = 'rgb(3 4 7 / 0.55)';

export class Tape {
  /** @param {import('./state.js').State} state @param {Does} does */
  constructor(state, does) {
    this.state = state;
    this.does = does;
    /** @type {Laid|null} as it is seen; the state follows when the hand rests */
    this.laid = null;
    /** Whether hands on the map lay the tape, and whether the next knot begins a new one. */
    this.taken = false;
    this.fresh = true;
    /** @type {Place|null} CSS pixels */ this.cursor = null;
    this.byKey = false;
  }

  /** Takes it in hand, or lays it down. */
  take() {
    if (this.taken) return this.down();
    this.hold(true);
  }

  /** @param {boolean} fresh */
  hold(fresh) {
    this.taken = true;
    this.fresh = fresh;
    this.does.taken(true);
    this.does.hint(say('tape_hint'));
    this.does.wake();
  }

  /** Lays down what there is. */
  down() {
    if (!this.taken) return;
    this.taken = false;
    if (this.laid && this.laid.points.length < 2) this.laid = null;
    this.does.taken(false);
    this.does.hint('');
    this.keep();
  }

  /** Puts the tape away. */
  away() {
    this.laid = null;
    this.taken = false;
    this.does.taken(false);
    this.does.hint('');
    this.keep();
  }

  /** The state takes over what is laid, to a tenth of a pixel. */
  keep() {
    const { laid, state } = this;
    if (laid && laid.points.length > 1) {
      const places = Math.min(Math.max(Math.ceil(Math.log10(this.does.view().scale)) + 1, 0), 12);
      const points = laid.points.map(([u, v]) => /** @type {Place} */ ([Number(u.toFixed(places)), Number(v.toFixed(places))]));
      state.set({ tape: { points, closed: laid.closed } });
    } else if (!laid) state.set({ tape: null });
    this.does.wake();
  }

  /** Takes over from the state, as when a link is followed. */
  follow() {
    if (!this.taken) this.laid = this.state.tape;
  }

  // Hands --------------------------------------------------------------------------------------------------------

  /** Which knot lies here, -1 for none. @param {number} x CSS pixels @param {number} y @param {number} [near] */
  knotAt(x, y, near = NEAR) {
    const { laid } = this;
    if (!laid) return -1;
    const view = this.does.view();
    let best = -1;
    laid.points.forEach((place, i) => {
      const [a, b] = view.apply(...place);
      const d = Math.hypot(a - x, b - y);
      if (d < near && (laid.points.length <= FEW || i === 0 || (!laid.closed && i === laid.points.length - 1))) [best, near] = [i, d];
    });
    return best;
  }

  /** Whether the thread runs here. @param {number} x CSS pixels @param {number} y @param {boolean} touch */
  near(x, y, touch) {
    const view = this.does.view();
    const path = this.path(view);
    const near = touch ? NEAR_TOUCH : NEAR;
    return path.some((b, i) => i > 0 && off(path[i - 1], b, [x, y]) < near);
  }

  /** What a press on the map begins: a stroke of the tape, or nothing. @param {number} x @param {number} y @param {boolean} touch */
  press(x, y, touch) {
    const before = this.laid;
    const near = touch ? NEAR_TOUCH : NEAR;
    const cancel = () => {
      this.laid = before;
      this.does.wake();
    };
    this.byKey = false;
    if (this.taken) {
      const first = this.does.view().invert(x, y);
      const begun = !this.fresh && before ? before.points : [];
      const drawn = [...begun, first];
      return {
        cancel,
        move: (/** @type {number} */ px, /** @type {number} */ py) => {
          drawn.push(this.does.view().invert(px, py));
          this.cursor = null;
          this.laid = { points: drawn, closed: false };
          this.does.wake();
        },
        end: (/** @type {number} */ px, /** @type {number} */ py, /** @type {boolean} */ tap) => {
          this.laid = before;
          if (tap) this.knot(px, py, near);
          else this.drawn(begun, drawn.slice(begun.length), near);
        },
      };
    }
    const knot = this.knotAt(x, y, near);
    if (knot < 0 || !before) return null;
    return {
      cancel,
      move: (/** @type {number} */ px, /** @type {number} */ py) => {
        this.laid = { ...before, points: before.points.map((p, i) => (i === knot ? this.does.view().invert(px, py) : p)) };
        this.does.wake();
      },
      end: () => this.keep(),
    };
  }

  /** A knot, or the end at the last one, or an outline at the first. @param {number} x @param {number} y @param {number} [near] */
  knot(x, y, near = NEAR) {
    const points = this.fresh || !this.laid ? [] : this.laid.points;
    const at = points.length ? this.knotAt(x, y, near) : -1;
    if (at === 0 && points.length > 2) {
      this.laid = { points, closed: true };
      return this.down();
    }
    if (at >= 0 && at === points.length - 1) return points.length > 1 ? this.down() : undefined;
    this.laid = { points: [...points, this.does.view().invert(x, y)], closed: false };
    this.fresh = false;
    this.keep();
  }

  /** A free-hand stroke. @param {Place[]} begun @param {Place[]} stroke @param {number} near */
  drawn(begun, stroke, near) {
    const view = this.does.view();
    const path = stroke.map((p) => view.apply(...p));
    const ends = [view.apply(...(begun[0] ?? stroke[0])), path[path.length - 1]];
    const reach = path.reduce((most, p) => Math.max(most, Math.hypot(p[0] - ends[0][0], p[1] - ends[0][1])), 0);
    const gap = Math.hypot(ends[0][0] - ends[1][0], ends[0][1] - ends[1][1]);
    const closed = gap < Math.max(2 * near, 0.15 * reach) && reach > 3 * near;
    let fine = 0.8;
    let kept = thinned(path, fine);
    while (kept.length + begun.length > MOST) kept = thinned(path, (fine *= 1.5));
    if (closed && kept.length > 3 && gap < 2 * near) kept.pop();
    this.laid = { points: [...begun, ...kept.map((i) => stroke[i])], closed };
    this.fresh = false;
    if (closed) this.down();
    else this.keep();
  }

  /** Enter: a knot under the cursor, or in the middle of the map. */
  enter() {
    if (!this.taken) return;
    this.byKey = true;
    this.knot(...this.tip());
  }

  /** Backspace: the last knot is taken back, or an outline is opened again. */
  back() {
    const { laid } = this;
    if (!laid) return;
    this.byKey = !this.cursor;
    this.laid = laid.closed ? { ...laid, closed: false } : laid.points.length > 1 ? { points: laid.points.slice(0, -1), closed: false } : null;
    this.hold(!this.laid);
    this.keep();
  }

  /** @returns {Place} CSS pixels: where the next knot would be */
  tip() {
    const view = this.does.view();
    return this.cursor ?? [view.w / 2, view.h / 2];
  }

  /** @param {number|null} x @param {number|null} y */
  hover(x, y) {
    this.cursor = x === null || y === null ? null : [x, y];
    if (this.cursor) this.byKey = false;
  }

  // Drawing ------------------------------------------------------------------------------------------------------

  /** The thread on the map, CSS pixels. @param {View} view @returns {Place[]} */
  path(view) {
    const { laid } = this;
    if (!laid) return [];
    const path = laid.points.map((p) => view.apply(...p));
    return laid.closed ? [...path, path[0]] : path;
  }

  /** @param {CanvasRenderingContext2D} context @param {View} view @param {number} em CSS pixels */
  draw(context, view, em) {
    const path = this.path(view);
    const running = this.taken && (this.cursor || this.byKey);
    const knots = this.taken && this.fresh && running ? [] : path.slice(0, this.laid?.closed ? -1 : undefined);
    const line = running ? [...knots, this.tip()] : path;
    if (running && !knots.length) cross(context, this.tip());
    if (line.length < 2) return knots.forEach((p) => tick(context, p, [p], 0, HAND));
    context.lineJoin = 'round';
    for (const [style, width] of /** @type {[string, number][]} */ ([[SHADE, 3.5], [THREAD, 1.1]])) {
      context.strokeStyle = style;
      context.lineWidth = width;
      context.beginPath();
      line.forEach(([x, y], i) => (i ? context.lineTo(x, y) : context.moveTo(x, y)));
      context.stroke();
    }
    if (!this.laid?.closed) this.marks(context, view, line, em);
    const all = knots.length <= FEW;
    knots.forEach((p, i) => (all || i === 0 || (i === knots.length - 1 && !this.laid?.closed)) && tick(context, p, line, i, HAND));
  }

  /** An open thread bears the rungs of the ladder, and its length at the end. @param {CanvasRenderingContext2D} context @param {View} view @param {Place[]} line @param {number} em */
  marks(context, view, line, em) {
    const measure = this.does.measure();
    const all = line.reduce((sum, p, i) => sum + (i ? Math.hypot(p[0] - line[i - 1][0], p[1] - line[i - 1][1]) : 0), 0);
    const step = rungs(14 / view.scale, 2000 / view.scale, measure).pop()?.length ?? 0;
    context.strokeStyle = THREAD;
    context.lineWidth = 1;
    context.beginPath();
    let gone = 0;
    for (let i = 1, n = 1; i < line.length && step && all < 1e4; i++) {
      const [a, b] = [line[i - 1], line[i]];
      const way = Math.hypot(b[0] - a[0], b[1] - a[1]);
      for (; n * step * view.scale <= gone + way; n++) {
        const t = (n * step * view.scale - gone) / way;
        const half = n % 5 ? 2.5 : 5;
        const [x, y] = [a[0] + t * (b[0] - a[0]), a[1] + t * (b[1] - a[1])];
        const [ox, oy] = [(-(b[1] - a[1]) / way) * half, ((b[0] - a[0]) / way) * half];
        context.moveTo(x - ox, y - oy);
        context.lineTo(x + ox, y + oy);
      }
      gone += way;
    }
    context.stroke();
    const [end, last] = [line[line.length - 1], line[line.length - 2]];
    const left = end[0] < last[0] || end[0] > view.w - 6 * em;
    context.font = `${em}px system-ui, sans-serif`;
    context.textAlign = left ? 'right' : 'left';
    context.textBaseline = 'middle';
    lettered(context, length(all / view.scale, measure, 4), end[0] + (left ? -em : em), end[1] + (end[1] < last[1] ? -em : em));
  }
}

/** Words on the map stand out from it by a dark rim. @param {CanvasRenderingContext2D} context @param {string} text @param {number} x @param {number} y */
export function lettered(context, text, x, y) {
  context.lineJoin = 'round';
  context.strokeStyle = 'rgb(3 4 7 / 0.7)';
  context.lineWidth = 3;
  context.strokeText(text, x, y);
  context.fillStyle = THREAD;
  context.fillText(text, x, y);
}

/** A knot: a short stroke across the thread, the first one longer. @param {CanvasRenderingContext2D} context @param {Place} p @param {Place[]} line @param {number} i @param {string} style */
function tick(context, p, line, i, style) {
  const a = line[i - 1] ?? (line[i + 1] && line.length > 1 ? p : null);
  const b = line[i + 1] ?? p;
  const from = a ?? p;
  const way = Math.hypot(b[0] - from[0], b[1] - from[1]);
  const half = i === 0 ? 8 : 6;
  const [ox, oy] = way ? [(-(b[1] - from[1]) / way) * half, ((b[0] - from[0]) / way) * half] : [0, half];
  context.strokeStyle = style;
  context.lineWidth = 1.75;
  context.beginPath();
  context.moveTo(p[0] - ox, p[1] - oy);
  context.lineTo(p[0] + ox, p[1] + oy);
  context.stroke();
}

/** Where a key would put the first knot. @param {CanvasRenderingContext2D} context @param {Place} p */
function cross(context, [x, y]) {
  context.strokeStyle = HAND;
  context.lineWidth = 1;
  context.beginPath();
  for (const [dx, dy] of [[0, 1], [1, 0], [0, -1], [-1, 0]]) {
    context.moveTo(x + 4 * dx, y + 4 * dy);
    context.lineTo(x + 11 * dx, y + 11 * dy);
  }
  context.stroke();
}

/** How far a point is off a piece of the thread. @param {Place} a @param {Place} b @param {Place} p */
function off(a, b, p) {
  const [x, y] = [b[0] - a[0], b[1] - a[1]];
  const t = Math.min(Math.max(((p[0] - a[0]) * x + (p[1] - a[1]) * y) / (x * x + y * y || 1), 0), 1);
  return Math.hypot(a[0] + t * x - p[0], a[1] + t * y - p[1]);
}

/**
 * Which points of a path are needed for it to stay within a distance of itself (Ramer 1972; Douglas & Peucker 1973).
 * @param {Place[]} path @param {number} most
 * @returns {number[]}
 */
function thinned(path, most) {
  const kept = [0];
  const halve = (/** @type {number} */ a, /** @type {number} */ b) => {
    let [far, at] = [most, -1];
    for (let i = a + 1; i < b; i++) {
      const d = off(path[a], path[b], path[i]);
      if (d > far) [far, at] = [d, i];
    }
    if (at >= 0) {
      halve(a, at);
      halve(at, b);
    } else kept.push(b);
  };
  if (path.length > 1) halve(0, path.length - 1);
  return kept;
}
