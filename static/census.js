// The top edge: how many objects of the catalogue are in view at each rank, over the outline of the whole catalogue, and a
// brush that keeps only some of them. In: state, counts from the server. Out: a new brush.

import { dress, make, svg } from './dom.js';
import { handle } from './handle.js';
import { rounded } from './link.js';
import { count, decade, number, quantity, unit } from './units.js';
import { say } from './words.js';

/** @typedef {{column: string, unit: string, edges: number[], in_view: number[], whole: number[], log: boolean}} Counts */

/** Before the first answer, and without a catalogue. @type {Counts} */
export const NONE = { column: '', unit: '', edges: [], in_view: [], whole: [], log: false };

export class CensusEdge {
  /** @param {HTMLElement} root @param {HTMLElement} corner @param {import('./state.js').State} state */
  constructor(root, corner, state) {
    this.state = state;
    this.counts = NONE;
    /** of the field, CSS pixels */ this.width = 0;
    this.pad = 6;
    root.setAttribute('aria-label', say('census'));
    this.text = make('div.text', { role: 'status' });
    this.all = make('button.word.act', { type: 'button', title: say('census_all_title'), click: () => state.set({ brush: null }) }, say('census_all'));
    this.field = make('div.field');
    this.plot = svg('svg', { 'aria-hidden': 'true' });
    this.field.append(this.plot);
    this.low = this.end('census_low', 0);
    this.high = this.end('census_high', 1);
    corner.append(this.text, this.all);
    root.append(this.field);
    this.field.addEventListener('pointerdown', (event) => this.draw_brush(event));
    new ResizeObserver(() => this.draw()).observe(this.field);
  }

  /** @param {import('./words.js').Word} word @param {0|1} which */
  end(word, which) {
    const column = this.state.epoch.catalogue?.rank ?? '';
    const grip = handle(this.field, {
      name: say(word, { column }),
      along: 'horizontal',
      drag: (x) => this.move(which, this.at(x)),
      nudge: (steps) => {
        if (!this.counted) return;
        const range = this.span[1] - this.span[0];
        const now = this.t(this.ends[which]);
        this.move(which, Number.isFinite(steps) ? this.back(now + (steps * range) / 50) : this.back(this.span[steps > 0 ? 1 : 0]));
      },
      reset: () => this.state.set({ brush: null }),
    });
    this.field.append(grip.root);
    return grip;
  }

  get counted() {
    return this.counts.edges.length > 1;
  }

  /** @param {number} value */
  t(value) {
    return this.counts.log ? Math.log10(value) : value;
  }

  /** @param {number} t */
  back(t) {
    return this.counts.log ? 10 ** t : t;
  }

  /** The axis in its own coordinate. @returns {[number, number]} */
  get span() {
    const { edges } = this.counts;
    return [this.t(edges[0]), this.t(edges[edges.length - 1])];
  }

  /** What the brush lets through. @returns {[number, number]} */
  get ends() {
    const { edges } = this.counts;
    return this.state.brush ?? [edges[0], edges[edges.length - 1]];
  }

  /** @param {number} x CSS pixels */
  at(x) {
    const [a, b] = this.span;
    return this.back(a + Math.min(Math.max((x - this.pad) / (this.width - 2 * this.pad), 0), 1) * (b - a));
  }

  /** @param {number} value */
  x(value) {
    const [a, b] = this.span;
    return this.pad + Math.min(Math.max((this.t(value) - a) / (b - a), 0), 1) * (this.width - 2 * this.pad);
  }

  /** @param {0|1} which @param {number} value */
  move(which, value) {
    if (!this.counted) return;
    const ends = [...this.ends];
    ends[which] = value;
    this.brush(ends[0], ends[1]);
  }

  /** @param {number} a @param {number} b */
  brush(a, b) {
    const { edges } = this.counts;
    const [first, last] = [edges[0], edges[edges.length - 1]];
    const lo = a <= first * (1 + 1e-9) ? first : rounded(Math.max(a, first), 3);
    const hi = b >= last * (1 - 1e-9) ? last : rounded(Math.min(b, last), 3);
    if (lo >= hi) return;
    this.state.set({ brush: lo === first && hi === last ? null : [lo, hi] });
  }

  /** A drag over the bars draws the brush. @param {PointerEvent} event */
  draw_brush(event) {
    if (!this.counted || /** @type {Element} */ (event.target).closest('.handle') || event.button !== 0) return;
    const left = this.field.getBoundingClientRect().left;
    const from = this.at(event.clientX - left);
    this.field.setPointerCapture(event.pointerId);
    const move = (/** @type {PointerEvent} */ e) => {
      const to = this.at(e.clientX - left);
      if (Math.abs(this.x(to) - this.x(from)) > 3) this.brush(Math.min(from, to), Math.max(from, to));
    };
    this.field.addEventListener('pointermove', move);
    const end = () => this.field.removeEventListener('pointermove', move);
    this.field.addEventListener('pointerup', end, { once: true });
    this.field.addEventListener('pointercancel', end, { once: true });
  }

  /** @param {Counts} counts */
  setCounts(counts) {
    this.counts = counts;
    this.draw();
  }

  draw() {
    const { clientWidth: w, clientHeight: h } = this.field;
    const { counts, state } = this;
    const none = !state.epoch.catalogue;
    if (none) this.text.textContent = say('census_none');
    for (const grip of [this.low, this.high]) dress(grip.root, { hidden: !this.counted });
    dress(this.all, { hidden: !state.brush });
    if (!this.counted || !w || !h) return;
    this.width = w;
    const tall = h > 40;
    const base = h - (tall ? 18 : 3);
    const top = 6;
    const most = Math.max(...counts.whole, 1);
    // Counts are drawn by their square root: one heavy cluster is as easy to see as the thousandth dwarf.
    // The bars fill the height with what is in view; the outline keeps the shape of the whole.
    const seenMost = Math.max(...counts.in_view, 6);
    const y = (/** @type {number} */ n, /** @type {number} */ top_n) => base - (base - top) * Math.sqrt(n / top_n);
    const [lo, hi] = this.ends;
    const marks = [];
    let outline = `M${this.x(counts.edges[0])} ${base}`;
    counts.whole.forEach((n, i) => {
      const [a, b] = [this.x(counts.edges[i]), this.x(counts.edges[i + 1])];
      outline += `V${y(n, most).toFixed(1)}H${b.toFixed(1)}`;
      const seen = counts.in_view[i];
      if (!seen) return;
      const on = counts.edges[i + 1] > lo && counts.edges[i] < hi;
      marks.push(svg('rect', { class: on ? 'bar on' : 'bar', x: a + 0.5, y: y(seen, seenMost), width: Math.max(b - a - 1, 0.5), height: base - y(seen, seenMost) }));
    });
    marks.unshift(svg('path', { class: 'outline', d: `${outline}V${base}` }), svg('path', { class: 'rung', d: `M${this.pad} ${base + 0.5}H${w - this.pad}` }));
    if (tall) marks.push(...this.numerals(h));
    marks.push(svg('path', { class: state.brush ? 'grip' : 'grip faint', d: `M${this.x(lo)} ${base + 1.5}H${this.x(hi)}` }));
    this.plot.setAttribute('viewBox', `0 0 ${w} ${h}`);
    this.plot.replaceChildren(...marks);
    const limits = { min: counts.edges[0], max: counts.edges[counts.edges.length - 1] };
    this.low.place(this.x(lo), tall ? base - 24 : 0, { now: lo, ...limits, text: quantity(lo, counts.unit, 3) });
    this.high.place(this.x(hi), tall ? base - 24 : 0, { now: hi, ...limits, text: quantity(hi, counts.unit, 3) });
    this.describe();
  }

  /** @param {number} h */
  numerals(h) {
    const { counts } = this;
    const [a, b] = this.span;
    /** @type {Element[]} */ const texts = [];
    const put = (/** @type {number} */ value, /** @type {string} */ text) => texts.push(svg('text', { x: this.x(value), y: h - 4, 'text-anchor': 'middle' }, text));
    const label = [counts.column.replaceAll('_', ' '), unit(counts.unit)].filter(Boolean).join(', ');
    const room = this.width - this.pad - 8 * label.length - 24;
    if (counts.log) for (let p = Math.ceil(a); p <= b; p++) this.x(10 ** p) < room && put(10 ** p, decade(p));
    else for (let i = 1; i < 5; i++) put(a + ((b - a) * i) / 6, number(a + ((b - a) * i) / 6, 3));
    texts.push(svg('text', { x: this.width - this.pad, y: h - 4, 'text-anchor': 'end' }, label));
    return texts;
  }

  describe() {
    const { counts, state } = this;
    const [lo, hi] = this.ends;
    const inside = counts.in_view.reduce((sum, n, i) => sum + (counts.edges[i + 1] > lo && counts.edges[i] < hi ? n : 0), 0);
    const lines = [make('div', {}, say('census_count', { n: count(inside) }))];
    if (state.brush) lines.push(make('div.dim', {}, `${number(lo, 3)} – ${quantity(hi, counts.unit, 3)}`));
    this.text.replaceChildren(...lines);
  }
}
