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
    this.shown = '';
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
    const pane = this.map.paneAt(view, u);
    const layer = pane.front?.layer;
    const atlas = layer?.atlas ?? this.state.atlas;
    const parts = layer?.mate ? [layer, layer.mate] : layer ? [layer] : [];
    const measure = this.does.measure();
    const { factor, name } = coordinates(atlas.bounds, measure);
    const places = decimals(Math.max(1 / view.scale, atlas.pixel / 10) * factor);
    const [a, b] = atlas.view.axes ?? ['u', 'v'];
    const [x, y] = [u, v].map((coordinate) => fixed(coordinate * factor, places));
    this.where.replaceChildren(...[[a, x], [b, y]].map((parts) => make('div', {}, `${parts.join(' ')} ${name}`)));
    const where = `${a} = ${x}, ${b} = ${y} ${name}${measure.name === 'proper' || measure.name === 'angle' ? ` (${say(measure.name)})` : ''}`;
    const ask = ++this.asked;
    const at = pane.pixelAt(view, u, v);
    const found = await Promise.all(parts.map((_, part) => (at ? this.map.tiles.read(at.key, at.column, at.row, 1, 1, part) : null)));
    if (ask !== this.asked) return;
    const values = found.map((block) => (block ? block[0] : null));
    this.show(at ? values.map((value, i) => lineOf(value, parts[i].sheet)) : [[say('reading_outside'), '']]);
    const exact = values.map((value, i) => (value === null || Number.isNaN(value) ? '' : `${Number(value.toPrecision(7))} ${parts[i].sheet.unit}`));
    const titles = parts.map(({ sheet }) => sheet.title || sheet.name);
    this.text = say('reading_copy', { value: exact.filter(Boolean).join(', '), where, sheet: titles.join(', '), level: at?.level ?? '–' }).trim();
    this.value.dataset.value = values.map((value) => (value === null || Number.isNaN(value) ? '' : String(value))).join(' ').trim();
    this.does.tell(pane === this.map.pane ? (values[this.state.second ? 1 : 0] ?? null) : null);
  }

  /** @param {string[][]} lines text and unit of each */
  show(lines) {
    const key = JSON.stringify(lines);
    if (this.shown === key) return;
    this.shown = key;
    this.value.classList.toggle('two', lines.length > 1);
    this.value.replaceChildren(...lines.map(([text, of]) => make('div', {}, `${text} `, make('span', {}, of))));
  }
}

/** @param {number|null} value @param {import('./atlas.js').Sheet} sheet @returns {string[]} text and unit */
function lineOf(value, sheet) {
  if (value === null) return [say('reading_wait'), ''];
  return Number.isNaN(value) ? [say('reading_none'), ''] : [number(value), unit(sheet.unit)];
}
