// What the tape measures, in the right margin of the map: lengths at once, what a sheet holds inside an outline as the
// server answers. Every line is copied with its unit by a press. In: what is laid, state, measure. Out: a note.

import { make } from './dom.js';
import { length, number, read, unit } from './units.js';
import { say } from './words.js';

/** @typedef {import('./tape.js').Laid} Laid */
/**
 * What the server says of an outline; see tilemap.outline.Inside.
 * @typedef {{area: number, outside: number, mean: number|null, spread: number|null, unit: string, total: number|null,
 *   total_unit: string, total_of: string, together: number|null, level: number, pixel: number}} Inside
 */
/** @typedef {import('./words.js').Word} Word */
/** @typedef {{key: string, name: string, shown: string, copied: string, about?: string}} Row */

/** @param {import('./tape.js').Place[]} points @param {boolean} closed */
export function around(points, closed) {
  const ends = closed ? [...points, points[0]] : points;
  return ends.reduce((sum, [u, v], i) => sum + (i ? Math.hypot(u - ends[i - 1][0], v - ends[i - 1][1]) : 0), 0);
}

/** Area of a polygon by the surveyor's formula. @param {import('./tape.js').Place[]} points */
export function areaOf(points) {
  const [[u0, v0]] = points;
  // From the first corner on, so that far from the origin nothing is lost.
  const twice = points.reduce((sum, [u, v], i) => {
    const [a, b] = points[(i + 1) % points.length];
    return sum + (u - u0) * (b - v0) - (a - u0) * (v - v0);
  }, 0);
  return Math.abs(twice) / 2;
}

export class TapeNote {
  /**
   * @param {HTMLElement} root @param {import('./state.js').State} state
   * @param {{measure(): import('./units.js').Measure, copy(text: string, name: string): void, away(): void}} does
   */
  constructor(root, state, does) {
    this.root = root;
    this.state = state;
    this.does = does;
    /** @type {Inside|null} */ this.inside = null;
    this.failed = '';
    this.question = '';
    this.timer = 0;
    this.delay = 0;
    /** @type {AbortController|null} */ this.running = null;
    /** Whether it stands back for another note. */
    this.back = false;
    /** @type {Row[]} */ this.rows = [];
    root.setAttribute('aria-label', say('tape'));
  }

  /** Shows what is laid, as it is now. @param {Laid|null} laid */
  show(laid) {
    this.root.hidden = !laid || laid.points.length < 2 || this.back;
    if (!laid || laid.points.length < 2) this.forget();
    else {
      if (laid.closed) this.ask(laid);
      else this.forget();
      if (!this.root.hidden) this.write(laid);
    }
  }

  forget() {
    this.running?.abort();
    clearTimeout(this.timer);
    this.question = '';
    this.inside = null;
  }

  /** @param {Laid} laid */
  ask(laid) {
    const { atlas, epoch, sheet, slabs } = this.state;
    const outline = laid.points.map((p) => p.join(':')).join(',');
    const question = `${atlas.base}inside?${new URLSearchParams({ sheet: sheet.name, epoch: epoch.name, slabs: slabs.join(':'), outline })}`;
    if (question === this.question) return;
    this.forget();
    this.question = question;
    this.failed = '';
    this.delay = 0;
    this.timer = window.setTimeout(() => this.put(laid), 120);
  }

  /** @param {Laid} laid */
  async put(laid) {
    const control = new AbortController();
    this.running = control;
    try {
      const answer = await fetch(this.question, { signal: control.signal });
      if (answer.ok) this.inside = await answer.json();
      // A damaged tile stays damaged; a server that answers nothing of the kind never will.
      else if (answer.status === 503) throw new Error('busy');
      else this.failed = say(answer.status === 400 ? 'tape_refused' : answer.status === 404 ? 'tape_without' : 'tape_damaged');
    } catch {
      if (control.signal.aborted) return;
      this.delay = Math.min(this.delay * 2 || 1000, 15000);
      this.timer = window.setTimeout(() => this.put(laid), this.delay);
      return;
    }
    if (!control.signal.aborted && !this.root.hidden) this.write(laid);
  }

  /** @param {Word} key @param {number} size atlas unit @param {1|2} [power] @returns {Row} */
  size(key, size, power = 1) {
    const { value, name, plain } = read(size, this.does.measure(), power);
    return { key, name: say(key), shown: number(value) + name, copied: `${exact(value)} ${plain}`.trim() };
  }

  /** @param {Laid} laid @returns {Row[]} */
  measured({ points, closed }) {
    const rows = [this.size(closed ? 'tape_around' : 'tape_length', around(points, closed))];
    if (!closed && points.length > 2) rows.push(this.size('tape_ends', around([points[0], points[points.length - 1]], false)));
    if (!closed) return rows;
    const { inside } = this;
    rows.unshift(this.size('tape_area', inside?.area ?? areaOf(points), 2));
    /** @param {Word} key @param {number|null|undefined} value @param {string} of the unit @param {string} [about] */
    const add = (key, value, of, about) => {
      const there = typeof value === 'number';
      const shown = there ? `${number(value)} ${unit(of)}` : value === null ? say('reading_none') : say('reading_wait');
      rows.push({ key, name: say(key), shown: shown.trim(), copied: there ? `${exact(value)} ${of}`.trim() : '', about });
    };
    if (this.failed) return rows;
    const weight = this.state.sheet.weight ? this.title(this.state.sheet.weight) : '';
    add('tape_mean', inside?.mean, inside?.unit ?? '', weight ? say('tape_weighted', { weight }) : say('tape_by_area'));
    add('tape_spread', inside?.spread, inside?.unit ?? '', say('tape_deviation'));
    const { kind } = this.state.sheet;
    if (kind === 'dispersion' || kind === 'peak') add('tape_together', inside?.together, inside?.unit ?? '', say(kind === 'peak' ? 'tape_highest' : 'tape_common'));
    if (kind !== 'peak') add('tape_total', inside?.total, inside?.total_unit ?? '', weight);
    return rows;
  }

  /** @param {string} name of a sheet */
  title(name) {
    return this.state.atlas.sheet(this.state.epoch, name)?.title || name;
  }

  /** @param {Laid} laid */
  write(laid) {
    const { inside, does } = this;
    this.rows = this.measured(laid);
    const list = make('dl', {});
    for (const { key, name, shown, copied, about } of this.rows) {
      const value = make('button.word', { type: 'button', title: say('tape_copy'), disabled: !copied, 'data-row': key, click: () => does.copy(copied, name) }, shown);
      list.append(make('dt', {}, name), make('dd', {}, value, ...(about ? [make('div.dim', {}, about)] : [])));
    }
    /** @type {string[]} */
    const remarks = [];
    if (this.failed) remarks.push(this.failed);
    else if (inside) {
      remarks.push(inside.level ? say('tape_coarse', { size: length(inside.pixel, does.measure()), level: inside.level }) : say('tape_fine'));
      if (inside.outside > 0) remarks.push(say('tape_outside', { share: number(100 * inside.outside, 2) }));
    }
    const word = (/** @type {Word} */ key, /** @type {() => void} */ click) => make('button.word.act', { type: 'button', click }, say(key));
    const kept = /** @type {HTMLElement|null} */ (document.activeElement)?.dataset.row;
    this.root.replaceChildren(
      make('h2', {}, laid.closed ? this.title(this.state.sheet.name) : say('tape')),
      list,
      ...remarks.map((text) => make('p.dim', {}, text)),
      make('div.words', {}, word('tape_copy_all', () => does.copy(this.all(), say('tape'))), word('tape_away', () => does.away())),
    );
    if (kept) /** @type {HTMLElement|null} */ (this.root.querySelector(`[data-row="${kept}"]`))?.focus();
  }

  /** All lines, for copying. */
  all() {
    return this.rows.filter((row) => row.copied).map(({ name, copied }) => `${name}\t${copied}`).join('\n');
  }

  /**
   * The thin line from the tape to its note.
   * @param {CanvasRenderingContext2D} context @param {[number, number][]} path CSS pixels @param {HTMLElement} canvas
   */
  tie(context, path, canvas) {
    // Also where the note is kept back while the tape is laid.
    if (this.root.hidden || !path.length || !this.root.offsetWidth) return;
    const box = this.root.getBoundingClientRect();
    const map = canvas.getBoundingClientRect();
    const below = box.width > 0.8 * map.width;
    const [x, y] = below ? [box.left - map.left + 24, box.top - map.top] : [box.left - map.left + 2, box.top - map.top + 16];
    const near = path.reduce((best, p) => (Math.hypot(p[0] - x, p[1] - y) < Math.hypot(best[0] - x, best[1] - y) ? p : best));
    if (!below && near[0] > x) return;
    context.lineWidth = 1;
    context.strokeStyle = 'rgb(255 252 244 / 0.6)';
    context.beginPath();
    context.moveTo(near[0], near[1]);
    context.lineTo(x, y);
    context.stroke();
  }
}

/** To seven digits, as a person may paste it. @param {number} x */
const exact = (x) => String(Number(x.toPrecision(7)));
