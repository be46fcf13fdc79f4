// The left edge: how the values in view are distributed, beside the colour ramp that shows them, with a handle for the
// dark and one for the bright end. In: state and counts of codes in view. Out: a new tone.

import { position } from './coding.js';
import { make, svg, words } from './dom.js';
import { handle } from './handle.js';
import { rounded } from './link.js';
import { curves, shade, step } from './lut.js';
import { gradient, ramp, RAMPS } from './ramps.js';
import { typed } from './typed.js';
import { decade, number, quantity, unit } from './units.js';
import { say } from './words.js';

/** At most so many bins; each is a whole number of codes wide, so that all hold equally many. */
const BINS = 420;

export class ToneEdge {
  /** @param {HTMLElement} root @param {import('./state.js').State} state */
  constructor(root, state) {
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
    this.ramps = words(say('ramps'), (name) => state.setTone({ ramp: name }));
    this.ramps.root.classList.add('ramps');
    const act = (/** @type {'tone_auto'|'tone_reset'} */ key, /** @type {() => void} */ action) => make('button.word.act', { type: 'button', title: say(`${key}_title`), click: action }, say(key));
    this.acts = make('div.words', {}, act('tone_auto', () => this.auto()), act('tone_reset', () => this.reset()));
    root.append(this.unit, this.field, this.acts, this.curve.root, this.ramps.root);
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
    return this.state.sheet.coding === 'log';
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
    const { sheet, tone, atlas, slabs } = this.state;
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
    const { lo, hi } = this.state.usualTone(this.state.sheet);
    this.state.setTone({ lo, hi });
  }

  /** The next curve, or the next ramp. @param {'curve'|'ramp'} which */
  next(which) {
    const { sheet, tone } = this.state;
    const list = which === 'curve' ? curves(sheet) : RAMPS;
    this.state.setTone({ [which]: list[(list.indexOf(tone[which]) + 1) % list.length] });
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
    const { tone, sheet } = state;
    this.width = this.field.clientWidth;
    this.height = this.field.clientHeight;
    if (!this.width || !this.height) return;
    this.limits();
    this.unit.textContent = unit(sheet.unit);
    this.plot.setAttribute('viewBox', `0 0 ${this.width} ${this.height}`);
    this.drawStrip(tone);
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
    this.ramps.update(RAMPS.map((value) => ({ value, text: say(/** @type {import('./words.js').Word} */ (`ramp_${value}`)), mark: gradient(value, '90deg') })), tone.ramp);
  }

  /** The ramp as this tone lays it along the axis. @param {import('./lut.js').Tone} tone */
  drawStrip(tone) {
    const [rows, across] = [Math.round(this.height * devicePixelRatio), 9];
    Object.assign(this.strip, { width: across, height: rows });
    const context = /** @type {CanvasRenderingContext2D} */ (this.strip.getContext('2d'));
    const picture = context.createImageData(across, rows);
    const colours = ramp(tone.ramp);
    for (let i = 0; i < rows; i++) {
      const t = shade(this.value(this.at(((i + 0.5) / rows) * this.height)), tone);
      const k = 3 * step(t);
      // Beyond its ends the ramp goes on as a thread: all of that is one colour.
      const from = t < 0 || t > 1 ? across - 2 : 0;
      for (let x = from; x < across; x++) picture.data.set([colours[k], colours[k + 1], colours[k + 2], 255], 4 * (i * across + x));
    }
    context.putImageData(picture, 0, 0);
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
