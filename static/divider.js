// The line between two sides of the map, which a hand can move, and the names of what it divides. In: state. Out: where it
// stands, and the side in hand.

import { words } from './dom.js';
import { handle } from './handle.js';
import { mateOf, sheetOf } from './side.js';
import { fixed } from './units.js';
import { say } from './words.js';

/** @typedef {import('./side.js').Side} Side */

export class Divider {
  /** @param {HTMLElement} map @param {import('./state.js').State} state @param {import('./neighbours.js').Neighbours} neighbours */
  constructor(map, state, neighbours) {
    this.map = map;
    this.state = state;
    this.neighbours = neighbours;
    this.grip = handle(map, {
      name: say('divider'),
      along: 'horizontal',
      drag: (x) => this.move(x / map.clientWidth),
      nudge: (steps) => this.move(Number.isFinite(steps) ? state.divide + steps / 100 : steps > 0 ? 1 : 0),
      reset: () => this.move(0.5),
    });
    this.grip.root.classList.add('divider');
    this.names = words(say('side_in_hand'), (side) => state.hold(Number(side)));
    this.names.root.classList.add('sides');
    map.append(this.grip.root, this.names.root);
    this.draw();
  }

  /** @param {number} part of the width */
  move(part) {
    this.state.set({ divide: Math.round(Math.min(Math.max(part, 0), 1) * 1e4) / 1e4 });
  }

  draw() {
    const { grip, names, state } = this;
    grip.root.hidden = names.root.hidden = !state.divided;
    if (!state.divided) return;
    const texts = this.describe();
    names.update(texts.map((text, i) => ({ value: String(i), text })), String(state.held));
    const x = state.divide * this.map.clientWidth;
    grip.place(x, 0, { now: Math.round(100 * state.divide), min: 0, max: 100, text: say('divider_text', { share: Math.round(100 * state.divide), left: texts[0], right: texts[1] }) });
    // Where a side is narrow its name is cut short.
    [x, this.map.clientWidth - x].forEach((room, i) => (/** @type {HTMLElement} */ (names.root.children[i]).style.maxWidth = `${Math.max(room - 1, 0)}px`));
    names.root.style.transform = `translateX(${x.toFixed(2)}px)`;
  }

  /** Each side in words: what tells it from the other, and at least its sheet. @returns {string[]} */
  describe() {
    const [left, right] = this.state.sides;
    const sheet = (/** @type {Side} */ side) => {
      const [first, mate] = [sheetOf(side), mateOf(side)].map((s) => s && (s.title || s.name));
      return mate ? `${first} ${say(`how_${side.how || 'alone'}`)} ${mate}` : `${first}`;
    };
    const epoch = (/** @type {Side} */ { epoch: { redshift, name } }) => (typeof redshift === 'number' ? say('epoch', { z: fixed(redshift, 2) }) : name);
    const each = (/** @type {(side: Side) => string} */ of) => [left, right].map(of);
    const lines = [each(sheet)];
    if (left.atlas !== right.atlas) lines.push(each((side) => this.neighbours.titleOf(side.atlas)));
    const epochs = each(epoch);
    if (epochs[0] !== epochs[1]) lines.push(epochs);
    return [0, 1].map((i) => lines.filter((line) => line === lines[0] || line[0] !== line[1]).map((line) => line[i]).join(' · '));
  }
}
