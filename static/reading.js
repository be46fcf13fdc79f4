// The number under the cursor: the one that is in the file, with its unit, and where that is. Without a cursor, the last
// place that was tapped, or the middle of the map. In: view, cursor. Out: three short lines, and the value for the tone edge.

import { make } from './dom.js';
import { coordinates, decimals, fixed, number, unit } from './units.js';
import { say } from './words.js';

export class Reading {
  /**
   * @param {HTMLElement} root @param {import('./state.js').State} state @param {import('./map.js').MapSurface} map
   * @param {{tell(value: number|null): void, copy(): void, measure(): import('./units.js').Measure}} does
   */
  constructor(root, state, map, does) {
    this.state = state;
    this.map = map;
    this.does = does;
    /** @type {[number, number]|null} CSS pixels on the map */ this.cursor = null;
    /** @type {[number, number]|null} a place that was tapped */ this.place = null;
    this.value = make('button.value', { type: 'button', title: say('reading_title'), click: () => does.copy() });
    this.where = make('div.where');
    root.append(this.value, this.where);
    this.asked = 0;
    this.text = '';
  }

  /** @param {number|null} x @param {number|null} y */
  hover(x, y) {
    this.cursor = x === null || y === null ? null : [x, y];
    if (this.cursor) this.place = null;
  }

  /** @param {import('./view.js').View} view */
  async update(view) {
    const { u0, u1, v0, v1 } = view.bounds;
    if (this.place && (this.place[0] < u0 || this.place[0] > u1 || this.place[1] < v0 || this.place[1] > v1)) this.place = null;
    const [u, v] = this.cursor ? view.invert(...this.cursor) : (this.place ?? [view.u, view.v]);
    const { atlas } = this.state;
    const sheet = this.map.front?.layer.sheet ?? this.state.sheet;
    const measure = this.does.measure();
    const { factor, name } = coordinates(atlas.bounds, measure);
    const places = decimals(Math.max(1 / view.scale, atlas.pixel / 10) * factor);
    const [a, b] = atlas.view.axes ?? ['u', 'v'];
    const [x, y] = [u, v].map((coordinate) => fixed(coordinate * factor, places));
    this.where.replaceChildren(...[[a, x], [b, y]].map((parts) => make('div', {}, `${parts.join(' ')} ${name}`)));
    const where = `${a} = ${x}, ${b} = ${y} ${name}${measure.name === 'proper' || measure.name === 'angle' ? ` (${say(measure.name)})` : ''}`;
    const ask = ++this.asked;
    const at = this.map.pixelAt(view, u, v);
    const found = at ? await this.map.tiles.read(at.key, at.column, at.row) : null;
    if (ask !== this.asked) return;
    const value = found ? found[0] : null;
    if (!at) this.show(say('reading_outside'));
    else if (value === null) this.show(say('reading_wait'));
    else if (Number.isNaN(value)) this.show(say('reading_none'));
    else this.show(number(value), unit(sheet.unit));
    const exact = value === null || Number.isNaN(value) ? '' : `${Number(value.toPrecision(7))} ${sheet.unit}`;
    this.text = say('reading_copy', { value: exact, where, sheet: sheet.title || sheet.name, level: at?.level ?? '–' }).trim();
    this.value.dataset.value = value === null || Number.isNaN(value) ? '' : String(value);
    this.does.tell(value);
  }

  /** @param {string} text @param {string} [of] the unit */
  show(text, of = '') {
    if (this.value.textContent === `${text} ${of}`) return;
    this.value.replaceChildren(`${text} `, make('span', {}, of));
  }
}
