// The left edge: how the values in view are distributed, beside the colour ramp that shows them, with a handle for the
// dark and one for the bright end. In: state and counts of codes in view. Out: a new tone.

import { HUES, hueGradient } from './blend.js';
import { position } from './coding.js';
import { dress, make, svg, words } from './dom.js';
import { handle } from './handle.js';
import { drawKey } from './key.js';
import { rounded } from './link.js';
import { curves } from './lut.js';
import { gradient, RAMPS } from './ramps.js';
import { typed } from './typed.js';
import { decade, number, quantity, unit } from './units.js';
import { say } from './words.js';

/** At most so many bins; each is a whole number of codes wide, so that all hold equally many. */
const BINS = 420;

export class ToneEdge {
  /** @param {HTMLElement} root @param {import('./state.js').State} state */
  constructor(root, state) {
    this.root = root;
    this.state = state;
    /** @type {Float64Array|null} */ this.counts = null;
    /** @type {[number, number]} the ends they were counted between, on the axis of the sheet's coding */ this.counted = [0, 1];
    /** Ends of the axis, and what lies between. */
    this.bottom = 0;
    this.top = 1;
    this.span = 1;
    /** Of the field, CSS pixels. */
    this.width = 0;
    this.height = 0;
    /** @type {number|null} the value under the cursor */ this.reading = null;
    root.setAttribute('aria-label', say('tone'));
    this.unit = make('div.unit');
    this.which = words(say('tone_of'), (second) => state.set({ second: second === 'second' }));
    this.field = make('div.field');
    this.plot = svg('svg', { 'aria-hidden': 'true' });
    this.bars = svg('path', { class: 'bars' });
    this.ticks = svg('g', { class: 'ticks' });
    this.mark = svg('path', { class: 'mark' });
    this.plot.append(this.bars, this.ticks, this.mark);
    this.strip = /** @type {HTMLCanvasElement} */ (make('canvas.strip', { 'aria-hidden': 'true', width: 1, height: 1 }));
    this.field.append(this.plot, this.strip);
    this.bright = this.end('tone_bright', 'hi');
    this.dark = this.end('tone_dark', 'lo');
    this.curve = words(say('curve'), (curve) => state.setTone({ curve }));
    this.ramps = words(say('ramps'), (name) => state.setTone(this.hue ? { hues: name } : { ramp: name }));
    this.across = make('div.across');
    this.ramps.root.classList.add('ramps');
    const act = (/** @type {'tone_auto'|'tone_reset'} */ key, /** @type {() => void} */ action) => make('button.word.act', { type: 'button', title: say(`${key}_title`), click: action }, say(key));
    this.acts = make('div.words', {}, act('tone_auto', () => this.auto()), act('tone_reset', () => this.reset()));
    root.append(this.unit, this.which.root, this.field, this.across, this.acts, this.curve.root, this.ramps.root);
    this.field.addEventListener('wheel', (event) => this.wheel(event), { passive: false });
    new ResizeObserver(() => this.draw()).observe(this.field);
  }

  /** @param {'tone_bright'|'tone_dark'} word @param {'lo'|'hi'} which */
  end(word, which) {
    const grip = handle(this.field, {
      name: say(word),
      along: 'vertical',
      nudge: (steps) => this.move(which, Number.isFinite(steps) ? this.x(this.state.tone[which]) + (steps * this.span) / 100 : steps > 0 ? this.top : this.bottom),
      drag: (_, y) => this.move(which, this.at(y)),
      reset: () => this.type(which, say(word)),
      type: () => this.type(which, say(word)),
    });
    grip.root.classList.add(which);
    const label = make('span.number');
    grip.root.append(label);
    this.field.append(grip.root);
    return { ...grip, label };
  }

  /** A number typed for one end. @param {'lo'|'hi'} which @param {string} name */
  type(which, name) {
    const { root } = which === 'hi' ? this.bright : this.dark;
    // Beside the handle, not in it: a slider holds nothing that can be worked.
    const field = typed(this.field, name, this.state.tone[which], (value) => {
      if (value !== null && (value > 0 || !this.log)) this.state.setTone({ [which]: value });
      root.focus();
    });
    field.classList.add(which);
    field.style.top = `${this.y(this.state.tone[which])}px`;
  }

  get log() {
    return this.state.toned.coding === 'log';
  }

  /** Whether the sheet in hand gives the hue. */
  get hue() {
    return this.state.second && this.state.how === 'hue';
  }

  /** Axis coordinate of a value: its logarithm on log sheets. @param {number} value */
  x(value) {
    return this.log ? Math.log10(value) : value;
  }

  /** @param {number} x */
  value(x) {
    return this.log ? 10 ** x : x;
  }

  /** Ends of the axis: the sheet's own range with room above, and always the handles. */
  limits() {
    const { toned: sheet, tone, atlas, slabs } = this.state;
    const share = (slabs[1] - slabs[0]) / atlas.slabs;
    const low = sheet.percentiles?.['1'] ?? sheet.range[0];
    const [least, most] = [Math.min(low, sheet.percentiles?.['5'] ?? low), sheet.range[1]];
    if (this.log) {
      const bottom = Math.max(Math.log10(least), Math.log10(most) - 9) - 0.4 + (sheet.kind === 'sum' ? 0.6 * Math.log10(share) : 0);
      this.bottom = Math.min(bottom, Math.log10(tone.lo) - 0.1);
      this.top = Math.max(Math.log10(most) + 1, Math.log10(tone.hi) + 0.1);
    } else {
      const room = (most - sheet.range[0]) * 0.1 || 1;
      this.bottom = Math.min(sheet.range[0] - room, tone.lo);
      this.top = Math.max(most + room, tone.hi);
    }
    this.span = this.top - this.bottom;
  }

  /** @param {number} value */
  y(value) {
    return ((this.top - this.x(value)) / this.span) * this.height;
  }

  /** @param {number} y */
  at(y) {
    return this.top - (y / this.height) * this.span;
  }

  /** @param {'lo'|'hi'} which @param {number} x */
  move(which, x) {
    const { tone } = this.state;
    const gap = this.span / 200;
    const clipped = Math.min(Math.max(x, this.bottom), this.top);
    const kept = which === 'lo' ? Math.min(clipped, this.x(tone.hi) - gap) : Math.max(clipped, this.x(tone.lo) + gap);
    this.state.setTone({ [which]: this.round(kept) });
  }

  /** To three digits, or as fine as the axis needs. @param {number} x */
  round(x) {
    return rounded(this.value(x), 3);
  }

  /** The wheel moves the nearer end. @param {WheelEvent} event */
  wheel(event) {
    event.preventDefault();
    const y = event.clientY - this.field.getBoundingClientRect().top;
    const { tone } = this.state;
    const which = Math.abs(y - this.y(tone.lo)) < Math.abs(y - this.y(tone.hi)) ? 'lo' : 'hi';
    this.move(which, this.x(tone[which]) - Math.sign(event.deltaY) * (this.span / 120));
  }

  reset() {
    const { lo, hi } = this.state.usualTone(this.state.toned);
    this.state.setTone({ lo, hi });
  }

  /** The next curve, or the next ramp. @param {'curve'|'ramp'} which */
  next(which) {
    const { toned, tone } = this.state;
    const key = which === 'ramp' && this.hue ? 'hues' : which;
    const list = /** @type {string[]} */ ({ curve: curves(toned), ramp: RAMPS, hues: HUES }[key]);
    this.state.setTone({ [key]: list[(list.indexOf(tone[key]) + 1) % list.length] });
  }

  /** Both ends from the values in view: all but the emptiest fifth and the brightest few pixels. */
  auto() {
    const { counts } = this;
    const total = counts?.reduce((a, b) => a + b, 0);
    if (!counts || !total) return;
    const level = (/** @type {number} */ part) => {
      const [first, last] = this.counted;
      let sum = 0;
      const i = counts.findIndex((n) => (sum += n) >= part * total);
      return first + ((i + 0.5) / counts.length) * (last - first);
    };
    const [lo, hi] = [level(0.05), level(0.9995)];
    const room = Math.max(hi - lo, this.log ? 0.3 : this.span / 100);
    this.state.setTone({ lo: this.round(lo), hi: this.round(lo + room * 1.03) });
  }

  /** How the codes in view are to be counted. @param {import('./coding.js').Coding} coding */
  binning(coding) {
    this.limits();
    const first = Math.round(position(this.value(this.bottom), coding));
    const width = Math.max(Math.ceil((position(this.value(this.top), coding) - first) / BINS), 1);
    const bins = Math.ceil((position(this.value(this.top), coding) - first) / width);
    return { bins, first, last: first + bins * width };
  }

  /**
   * @param {Float64Array} counts
   * @param {{first: number, last: number}} how the codes they were counted between @param {import('./coding.js').Coding} coding
   */
  setCounts(counts, { first, last }, coding) {
    this.counts = counts;
    this.counted = [coding.low + coding.step * (first - 1), coding.low + coding.step * (last - 1)];
    this.drawBars();
  }

  /** @param {number|null} value */
  setReading(value) {
    this.reading = Number.isFinite(value) ? value : null;
    this.drawMark();
  }

  draw() {
    const { state } = this;
    const { tone, toned: sheet } = state;
    this.describe();
    this.width = this.plot.getBoundingClientRect().width;
    this.height = this.field.clientHeight;
    if (!this.width || !this.height) return;
    this.limits();
    this.plot.setAttribute('viewBox', `0 0 ${this.width} ${this.height}`);
    const rows = Math.round(this.height * devicePixelRatio);
    drawKey(this.strip, rows, state.paintOf(state.side), state.second, (i) => this.value(this.at(((i + 0.5) / rows) * this.height)));
    // Before the ticks, which keep clear of these numbers.
    this.bright.label.textContent = number(tone.hi, 3);
    this.dark.label.textContent = number(tone.lo, 3);
    this.drawTicks();
    this.drawBars();
    this.drawMark();
    const range = { min: this.value(this.bottom), max: this.value(this.top) };
    for (const [grip, which] of /** @type {const} */ ([[this.bright, 'hi'], [this.dark, 'lo']])) {
      grip.place(0, this.y(tone[which]), { now: tone[which], ...range, text: quantity(tone[which], sheet.unit, 3) });
    }
    this.curve.update(curves(sheet).map((value) => ({ value, text: say(`curve_${value}`) })), tone.curve);
    /** @type {[string[], string, (name: string) => string, string]} */
    const [names, kind, mark, now] = this.hue ? [HUES, 'hues', hueGradient, tone.hues] : [RAMPS, 'ramp', (name) => gradient(name, '90deg'), tone.ramp];
    this.ramps.update(names.map((value) => ({ value, text: say(/** @type {import('./words.js').Word} */ (`${kind}_${value}`)), mark: mark(value) })), now);
  }

  /** Whose tone this is, and with two sheets what the key says across. */
  describe() {
    const { state, root } = this;
    const { mate, sheet, toned } = state;
    root.classList.toggle('two', Boolean(mate));
    dress(this.unit, { hidden: Boolean(mate) });
    dress(this.which.root, { hidden: !mate });
    this.unit.textContent = unit(sheet.unit);
    this.bright.root.setAttribute('aria-label', say(this.hue ? 'tone_high' : 'tone_bright'));
    this.dark.root.setAttribute('aria-label', say(this.hue ? 'tone_low' : 'tone_dark'));
    if (!mate) return this.across.replaceChildren();
    const title = (/** @type {import('./atlas.js').Sheet} */ s) => [s.title || s.name, unit(s.unit)].filter(Boolean).join(' ');
    this.which.update([{ value: 'first', text: title(sheet) }, { value: 'second', text: title(mate) }], state.second ? 'second' : 'first');
    const other = toned === mate ? sheet : mate;
    const { lo, hi } = state.toneOf(other);
    this.across.textContent = say('tone_across', { lo: number(lo, 2), hi: number(hi, 2), unit: unit(other.unit) });
  }

  drawTicks() {
    /** @type {Element[]} */ const marks = [];
    const { tone } = this.state;
    const tall = this.bright.label.offsetHeight;
    const [hi, lo] = [this.y(tone.hi) - 2 - tall / 2, this.y(tone.lo) + 2 + tall / 2];
    const room = 0.8 * tall + 2;
    const add = (/** @type {number} */ x, /** @type {string} */ text) => {
      const y = ((this.top - x) / this.span) * this.height;
      if (Math.min(Math.abs(y - hi), Math.abs(y - lo)) < room) return;
      marks.push(svg('text', { x: 0, y: y + 3.5 }, text));
    };
    if (this.log) {
      const every = Math.max(1, Math.ceil((this.span * 26) / this.height));
      for (let power = Math.ceil(this.bottom); power <= this.top; power++) if (power % every === 0) add(power, decade(power));
    } else {
      const rough = this.span / 6;
      const unitStep = 10 ** Math.floor(Math.log10(rough));
      const size = [1, 2, 5].map((m) => m * unitStep).find((s) => s >= rough) ?? 10 * unitStep;
      for (let x = Math.ceil(this.bottom / size) * size; x <= this.top; x += size) add(x, number(Math.abs(x) < size / 2 ? 0 : x, 3));
    }
    this.ticks.replaceChildren(...marks);
  }

  drawBars() {
    const { counts } = this;
    if (!counts || !this.height) return this.bars.setAttribute('d', '');
    // Few pixels in view make coarse bins.
    const total = counts.reduce((a, b) => a + b, 0);
    const merge = Math.max(Math.round(counts.length / Math.max(2 * Math.sqrt(total), 12)), 1);
    const bars = Array.from({ length: Math.ceil(counts.length / merge) }, (_, i) => counts.slice(i * merge, (i + 1) * merge).reduce((a, b) => a + b, 0));
    const most = Math.max(...bars) || 1;
    const [first, last] = this.counted;
    const right = this.width;
    const reach = this.width * 0.62;
    const y = (/** @type {number} */ i) => (((this.top - first - ((i * merge) / counts.length) * (last - first)) / this.span) * this.height).toFixed(1);
    let d = `M${right} ${y(0)}`;
    bars.forEach((n, i) => (d += `H${(right - reach * Math.sqrt(n / most)).toFixed(1)}V${y(i + 1)}`));
    this.bars.setAttribute('d', `${d}H${right}Z`);
  }

  drawMark() {
    const { reading, width, height } = this;
    const seen = reading !== null && height && (!this.log || reading > 0);
    this.mark.setAttribute('d', seen ? `M0 ${Math.min(Math.max(this.y(reading), 1), height - 1)}H${width}` : '');
  }
}
