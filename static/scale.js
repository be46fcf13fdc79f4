// The right edge: a ladder of lengths from the whole view down to a pixel. Each rung is drawn as long as that length is on
// the map, as far as the margin goes; the rung at the thumb is the width in view. In: view, measure. Out: a new width.

import { make, svg, words } from './dom.js';
import { wheelFactor } from './gestures.js';
import { handle } from './handle.js';
import { length, measures, rungs } from './units.js';
import { say } from './words.js';

export class ScaleEdge {
  /**
   * @param {HTMLElement} root @param {import('./state.js').State} state
   * @param {() => import('./motion.js').Motion} motionOf
   */
  constructor(root, state, motionOf) {
    this.state = state;
    this.motionOf = motionOf;
    /** Lengths at both ends of the ladder, atlas unit. */
    this.top = 1;
    this.bottom = 1;
    /** Its place in the field, CSS pixels. */
    this.pad = 0;
    this.reach = 0;
    root.setAttribute('aria-label', say('scale'));
    this.field = make('div.field');
    this.plot = svg('svg', { 'aria-hidden': 'true' });
    this.field.append(this.plot);
    this.thumb = handle(this.field, {
      name: say('scale_thumb'),
      along: 'vertical',
      begin: () => motionOf().stop(),
      drag: (_, y) => this.go(this.at(y), false),
      nudge: (steps) => this.go(Number.isFinite(steps) ? this.motionOf().view.width * 1.15 ** steps : steps > 0 ? this.top : 0, false),
    });
    this.label = make('span.number');
    this.thumb.root.append(this.label);
    this.field.append(this.thumb.root);
    this.field.addEventListener('pointerdown', (event) => {
      if (event.target !== this.thumb.root) this.go(this.at(event.clientY - this.field.getBoundingClientRect().top), true);
    });
    const turned = wheelFactor();
    this.field.addEventListener('wheel', (event) => {
      const { view } = motionOf();
      motionOf().zoomBy(view.w / 2, view.h / 2, turned(event));
    }, { passive: false });
    this.choice = words(say('scale'), (name) => state.set({ lengths: name === this.list[0].name ? '' : name }));
    this.choice.root.classList.add('column');
    root.append(this.field, this.choice.root);
    new ResizeObserver(() => this.draw()).observe(this.field);
  }

  get list() {
    return measures(this.state.atlas.view, this.state.epoch);
  }

  /** @returns {import('./units.js').Measure} */
  get measure() {
    const { list } = this;
    return list.find((m) => m.name === this.state.lengths) ?? list[0];
  }

  /** The next way to read lengths. */
  turn() {
    const { list, measure } = this;
    const next = list[(list.findIndex((m) => m.name === measure.name) + 1) % list.length];
    this.state.set({ lengths: next === list[0] ? '' : next.name });
  }

  /** @param {number} y CSS pixels */
  at(y) {
    return this.top * (this.bottom / this.top) ** ((y - this.pad) / this.reach);
  }

  /** @param {number} length atlas unit */
  y(length) {
    return this.pad + (Math.log(this.top / length) / Math.log(this.top / this.bottom)) * this.reach;
  }

  /** @param {number} width atlas unit @param {boolean} fly */
  go(width, fly) {
    const motion = this.motionOf();
    const view = motion.view.with({ width: Math.max(width, motion.limits.narrowest(motion.view)) });
    if (fly) motion.fly(view);
    else motion.jump(view);
  }

  draw() {
    const motion = this.motionOf();
    const { clientWidth: w, clientHeight: h } = this.field;
    if (!motion || !w || !h) return;
    const { view, limits } = motion;
    const { measure } = this;
    this.pad = Math.min(14, h / 8);
    this.reach = h - 2 * this.pad;
    this.top = limits.widest(view);
    this.bottom = Math.min(limits.pixel, limits.narrowest(view));
    this.plot.setAttribute('viewBox', `0 0 ${w} ${h}`);
    const thumb = this.y(view.width);
    const marks = [];
    let last = -Infinity;
    const line = (this.label.offsetHeight || 16) * 1.05;
    for (const rung of rungs(this.bottom, this.top, measure)) {
      const y = Math.round(this.y(rung.length)) + 0.5;
      const reach = Math.min(rung.length * view.scale, w);
      const fits = rung.length * view.scale <= w;
      if (reach >= 0.7) marks.push(svg('path', { class: fits ? 'rung true' : 'rung', d: `M0 ${y}H${reach.toFixed(1)}` }));
      // Words stand above their rungs, and the words of the thumb above the thumb; none may touch another.
      const clear = Math.abs(y - thumb) > line && y - last > line && y > 24 && y < h - 20;
      if (clear) {
        marks.push(svg('text', { x: w, y: y - 3, class: rung.major ? 'major' : '' }, rung.text));
        last = y;
      }
    }
    const ends = [['scale_whole', this.top, 1], ['scale_pixel', limits.pixel, -1]];
    for (const [word, size, side] of /** @type {['scale_whole'|'scale_pixel', number, number][]} */ (ends)) {
      const y = Math.round(this.y(size)) + 0.5;
      marks.push(svg('path', { class: 'rung end', d: `M0 ${y}H${w}` }));
      if (Math.abs(y - thumb) > 14) {
        marks.push(svg('text', { x: 0, y: side > 0 ? y - 4 : y + 12, class: 'start' }, say(word)));
        if (side < 0) marks.push(svg('text', { x: w, y: y + 12 }, length(size, measure)));
      }
    }
    this.plot.replaceChildren(...marks);
    this.label.textContent = length(view.width, measure);
    const text = say('scale_text', { length: length(view.width, measure) });
    this.thumb.place(0, thumb, { now: view.width, min: limits.narrowest(view), max: this.top, text });
    const { list } = this;
    this.choice.root.hidden = list.length < 2;
    this.choice.update(list.map(({ name }) => ({ value: name, text: say(name === 'plane' ? 'comoving' : name) })), measure.name);
  }
}
