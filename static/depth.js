// The bottom edge: mass per slab along the line of sight, and a window on it that opens, closes and slides by whole slabs.
// In: state, whether the map is at rest. Out: a new window, again and again while it plays.

import { slabTotals } from './atlas.js';
import { dress, make, svg } from './dom.js';
import { handle } from './handle.js';
import { number, quantity } from './units.js';
import { say } from './words.js';

/** While it plays, a window is shown at least this long, ms. */
const STEP = 700;

export class DepthEdge {
  /**
   * @param {HTMLElement} root @param {HTMLElement} corner where the window is put in words
   * @param {import('./state.js').State} state @param {() => boolean} atRest
   */
  constructor(root, corner, state, atRest) {
    this.state = state;
    this.atRest = atRest;
    /** timer of the next step; 0 while nothing plays */ this.playing = 0;
    root.setAttribute('aria-label', say('depth'));
    this.field = make('div.field');
    this.plot = svg('svg', { 'aria-hidden': 'true' });
    this.field.append(this.plot);
    /** of the field, CSS pixels */ this.width = 0;
    this.pad = 6;
    /** @type {(name: import('./words.js').Word, drag: (x: number) => void, nudge: (steps: number) => void, begin?: (x: number) => void) => ReturnType<typeof handle>} */
    const part = (name, drag, nudge, begin) => {
      const grip = handle(this.field, { name: say(name), along: 'horizontal', drag, nudge, begin, reset: () => this.whole() });
      this.field.append(grip.root);
      return grip;
    };
    /** @type {{slab: number, shift: number}|null} a drag over the whole depth: where it began, and the hand's place less the drag's */
    this.sweep = null;
    this.slider = part('depth_slide', (x) => this.drag(x), (n) => this.slide(n), (x) => this.press(x));
    this.slider.root.classList.add('slide');
    this.near = part('depth_near', (x) => this.open(this.edgeAt(x), null), (n) => this.open(this.state.slabs[0] + n, null));
    this.far = part('depth_far', (x) => this.open(null, this.edgeAt(x)), (n) => this.open(null, this.state.slabs[1] + n));
    this.text = make('div.text', { role: 'status' });
    this.all = make('button.word.act', { type: 'button', title: say('depth_whole_title'), click: () => this.whole() }, say('depth_whole'));
    this.play = make('button.word.act', { type: 'button', title: say('depth_play_title'), click: () => this.turnPlay() });
    corner.append(this.text, make('div.words', {}, this.all, this.play));
    root.append(this.field);
    // A hand on the window takes it over.
    this.field.addEventListener('pointerdown', () => this.stop(), { capture: true });
    this.field.addEventListener('pointerdown', (event) => {
      if (event.target !== this.field && event.target !== this.plot && !this.plot.contains(/** @type {Node} */ (event.target))) return;
      this.slide(this.slabAt(event.clientX - this.field.getBoundingClientRect().left) - this.state.slabs[0]);
    });
    this.field.addEventListener('wheel', (event) => {
      event.preventDefault();
      this.slide(Math.sign(event.deltaY));
    }, { passive: false });
    new ResizeObserver(() => this.draw()).observe(this.field);
  }

  /**
   * A window over the whole depth has nowhere to slide to: a hand on it takes the slab that it touches, and the slabs that
   * it is drawn over.
   * @param {number} x CSS pixels
   */
  press(x) {
    this.sweep = this.state.wholeDepth ? { slab: this.slabAt(x), shift: x - this.x(this.edges[0]) } : null;
    if (this.sweep) this.set([this.sweep.slab, this.sweep.slab + 1]);
  }

  /** @param {number} x CSS pixels, of the near end of the window as it was when the drag began */
  drag(x) {
    if (!this.sweep) return this.slide(this.edgeAt(x) - this.state.slabs[0]);
    const { slab, shift } = this.sweep;
    const here = this.slabAt(x + shift);
    this.set([Math.min(slab, here), Math.max(slab, here) + 1]);
  }

  /** @param {number} by slabs; from the whole depth, to the slab at one end */
  slide(by) {
    const { atlas, slabs, wholeDepth } = this.state;
    if (wholeDepth) return by === 0 ? undefined : this.set(by > 0 ? [0, 1] : [atlas.slabs - 1, atlas.slabs]);
    const size = slabs[1] - slabs[0];
    const first = Math.min(Math.max(slabs[0] + by, 0), atlas.slabs - size);
    this.set([first, first + size]);
  }

  /** @param {number|null} near @param {number|null} far */
  open(near, far) {
    const { atlas, slabs } = this.state;
    const a = near === null ? slabs[0] : Math.min(Math.max(near, 0), slabs[1] - 1);
    const b = far === null ? slabs[1] : Math.max(Math.min(far, atlas.slabs), slabs[0] + 1);
    this.set([a, b]);
  }

  /** Closes or opens both ends by one slab. @param {number} by 1 opens, -1 closes */
  widen(by) {
    const [a, b] = this.state.slabs;
    const { slabs: n } = this.state.atlas;
    if (by > 0) this.set([Math.max(a - 1, 0), Math.min(b + 1, n)]);
    else if (b - a > 2) this.set([a + 1, b - 1]);
    else if (b - a === 2) this.set([a, b - 1]);
  }

  whole() {
    this.stop();
    this.set([0, this.state.atlas.slabs]);
  }

  /** The window a step further on, from the far end to the near one; from the whole depth, the nearest slab. @returns {[number, number]} */
  get following() {
    const { atlas, slabs: [a, b], wholeDepth } = this.state;
    if (wholeDepth) return [0, 1];
    return b < atlas.slabs ? [a + 1, b + 1] : [0, b - a];
  }

  /** Plays or stops. */
  turnPlay() {
    if (this.playing) return this.stop();
    this.step();
  }

  /** One step, and the next when everyone has had time to look at it and the map has all of it. */
  step() {
    if (this.state.atlas.slabs < 2) return;
    this.playing = window.setTimeout(() => (this.atRest() ? this.step() : this.wait()), STEP);
    this.set(this.following);
    this.draw();
  }

  wait() {
    this.playing = window.setTimeout(() => (this.atRest() ? this.step() : this.wait()), 50);
  }

  stop() {
    clearTimeout(this.playing);
    this.playing = 0;
    this.draw();
  }

  /** @param {[number, number]} slabs */
  set(slabs) {
    const [a, b] = this.state.slabs;
    if (a !== slabs[0] || b !== slabs[1]) this.state.set({ slabs });
  }

  /** @param {number} depth */
  x(depth) {
    const [a, b] = [this.edges[0], this.edges[this.edges.length - 1]];
    return this.pad + ((depth - a) / (b - a)) * (this.width - 2 * this.pad);
  }

  get edges() {
    return this.state.atlas.edges;
  }

  /** The slab edge nearest to a place. @param {number} x CSS pixels */
  edgeAt(x) {
    return this.edges.reduce((best, e, i) => (Math.abs(this.x(e) - x) < Math.abs(this.x(this.edges[best]) - x) ? i : best), 0);
  }

  /** @param {number} x CSS pixels */
  slabAt(x) {
    const i = this.edges.findIndex((e) => this.x(e) > x);
    return i < 0 ? this.state.atlas.slabs - 1 : Math.max(i - 1, 0);
  }

  draw() {
    const { atlas, epoch, sheet, slabs, wholeDepth } = this.state;
    const { clientWidth: w, clientHeight: h } = this.field;
    if (!w || !h) return;
    this.width = w;
    const { edges } = this;
    const { totals, unit } = slabTotals(atlas, epoch, sheet);
    const tall = h > 40;
    const base = h - (tall ? 18 : 3);
    const top = tall ? 16 : 4;
    const density = totals.map((t, i) => Math.max(t, 0) / (edges[i + 1] - edges[i]));
    const most = Math.max(...density) || 1;
    this.plot.setAttribute('viewBox', `0 0 ${w} ${h}`);
    const marks = [svg('path', { class: 'rung', d: `M${this.pad} ${base + 0.5}H${w - this.pad}` })];
    density.forEach((d, i) => {
      const [a, b] = [this.x(edges[i]), this.x(edges[i + 1])];
      const height = ((base - top) * d) / most;
      const on = i >= slabs[0] && i < slabs[1];
      marks.push(svg('rect', { class: on ? 'bar on' : 'bar', x: a + 0.5, y: base - height, width: Math.max(b - a - 1, 0.5), height }));
    });
    let last = -Infinity;
    edges.forEach((e, i) => {
      const x = this.x(e);
      if (!tall || x - last < 44) return;
      last = x;
      const anchor = i === 0 ? 'start' : i === edges.length - 1 ? 'end' : 'middle';
      marks.push(svg('text', { x: i === 0 ? this.pad : i === edges.length - 1 ? w - this.pad : x, y: h - 4, 'text-anchor': anchor }, number(e, 3)));
    });
    const [x0, x1] = [this.x(edges[slabs[0]]), this.x(edges[slabs[1]])];
    marks.push(svg('path', { class: 'grip', d: `M${x0} ${tall ? 8.5 : 0.5}H${x1}` }));
    this.plot.replaceChildren(...marks);
    this.describe(totals, unit);
    const axis = atlas.view.axes?.[2] ?? '';
    const reading = (/** @type {number} */ depth) => `${axis} ${number(depth, 4)} ${atlas.view.unit}`.trim();
    const limits = { min: edges[0], max: edges[edges.length - 1] };
    this.near.place(x0, tall ? 8 : 0, { now: edges[slabs[0]], ...limits, text: reading(edges[slabs[0]]) });
    this.far.place(x1, tall ? 8 : 0, { now: edges[slabs[1]], ...limits, text: reading(edges[slabs[1]]) });
    this.slider.place(x0, 0, { now: edges[slabs[0]], ...limits, text: this.text.textContent ?? '' });
    this.slider.root.style.width = `${x1 - x0}px`;
    dress(this.all, { hidden: wholeDepth });
    dress(this.play, { hidden: atlas.slabs < 2 });
    this.play.textContent = say(this.playing ? 'depth_stop' : 'depth_play');
  }

  /** The window in words. @param {number[]} totals @param {string} unit */
  describe(totals, unit) {
    const { atlas, slabs, wholeDepth, sheet } = this.state;
    const axis = atlas.view.axes?.[2] ?? '';
    const sum = (/** @type {number[]} */ list) => list.reduce((a, b) => a + b, 0);
    const [inside, all] = [sum(totals.slice(...slabs)), sum(totals)];
    const where = say('depth_reading', { axis, a: number(this.edges[slabs[0]], 3), b: number(this.edges[slabs[1]], 3), unit: atlas.view.unit });
    const total = sheet.kind === 'mean' && !sheet.weight ? '' : quantity(inside, unit, 3);
    const share = all > 0 ? say('depth_share', { share: number((100 * inside) / all, 3) }) : '';
    this.text.replaceChildren(make('div', {}, where), make('div.dim', {}, wholeDepth ? total : share));
  }
}
