// What is chosen, besides the place: what each side shows, depth window, tones, brush, object, lengths. One plain object,
// changed only through set(); a link is this state and the view written out, with what is as usual left out.

import { HUES } from './blend.js';
import { curves } from './lut.js';
import { RAMPS } from './ramps.js';
import { chosen, epochLike, mateOf, sheetOf } from './side.js';
import { usualTone } from './usual.js';

/** @typedef {import('./atlas.js').Atlas} Atlas */
/** @typedef {import('./atlas.js').Epoch} Epoch */
/** @typedef {import('./atlas.js').Sheet} Sheet */
/** @typedef {import('./lut.js').Tone} Tone */
/** @typedef {import('./link.js').Linked} Linked */
/** @typedef {import('./side.js').Side} Side */
/** @typedef {[import('./words.js').Word, Record<string, string>][]} Trouble words about what is not there */

const OF_A_SIDE = ['atlas', 'epoch', 'sheetName', 'how', 'mateName'];

export class State {
  /** @param {Atlas} home the atlas of the page @param {(changed: Set<string>) => void} changed */
  constructor(home, changed) {
    this.home = home;
    this.changed = changed;
    const [epoch] = home.epochs;
    /** @type {Side[]} the left, and the right of the divider if there is one */
    this.sides = [{ atlas: home, epoch, sheetName: epoch.sheets[0].name, how: '', mateName: '' }];
    /** the side that the instruments work on */ this.held = 0;
    /** whether the tone edge holds the second sheet of that side */ this.second = false;
    /** where the divider stands, of the width of the map */ this.divide = 0.5;
    /** @type {[number, number]|null} the depth window, atlas unit; null for all of it */ this.depth = null;
    /** @type {Record<string, Tone>} by sheet, where it is not the usual one */ this.tones = {};
    /** @type {[number, number]|null} */ this.brush = null;
    /** @type {string|null} */ this.object = null;
    /** @type {string} */ this.lengths = '';
    this.markers = true;
    /** @type {import('./tape.js').Laid|null} */ this.tape = null;
    /** @type {Map<string, Tone>} */
    this.usual = new Map();
  }

  /**
   * What belongs to a side goes to the one in hand.
   * @param {Partial<Side & Pick<State, 'sides'|'held'|'second'|'divide'|'slabs'|'tones'|'brush'|'object'|'lengths'|'markers'|'tape'>>} patch
   */
  set(patch) {
    /** @type {Record<string, any>} */ const now = this;
    const news = Object.entries(patch).filter(([key, value]) => value !== now[key]);
    if (!news.length) return;
    const side = Object.fromEntries(news.filter(([key]) => OF_A_SIDE.includes(key)));
    const rest = Object.fromEntries(news.filter(([key]) => !OF_A_SIDE.includes(key)));
    this.assign(rest);
    if (Object.keys(side).length) this.sides = this.sides.map((s, i) => (i === this.held ? chosen(s, side) : s));
    this.held = Math.min(this.held, this.sides.length - 1);
    this.second = this.second && Boolean(this.mate);
    this.changed(new Set(news.map(([key]) => key)));
  }

  /** @param {Record<string, any>} news */
  assign({ slabs, ...rest }) {
    if (slabs) this.depth = this.atlas.wholeDepth(slabs) ? null : [this.atlas.edges[slabs[0]], this.atlas.edges[slabs[1]]];
    Object.assign(this, rest);
  }

  // The side in hand ---------------------------------------------------------------------------------------------

  get side() {
    return this.sides[this.held];
  }

  get atlas() {
    return this.side.atlas;
  }

  get epoch() {
    return this.side.epoch;
  }

  get sheetName() {
    return this.side.sheetName;
  }

  get how() {
    return this.side.how;
  }

  get mateName() {
    return this.side.mateName;
  }

  get sheet() {
    return sheetOf(this.side);
  }

  /** The second sheet, where there is one. */
  get mate() {
    return mateOf(this.side);
  }

  /** The sheet whose tone is at the tone edge. @returns {Sheet} */
  get toned() {
    return (this.second && this.mate) || this.sheet;
  }

  get divided() {
    return this.sides.length > 1;
  }

  /** The part of the map's width where the objects of the side in hand belong. */
  get ownPart() {
    const [left, right] = this.sides;
    if (!right || (left.atlas === right.atlas && left.epoch === right.epoch)) return [0, 1];
    return this.held ? [this.divide, 1] : [0, this.divide];
  }

  /** Another side to compare with, at first of the next sheet; or one map again, of the side in hand if that is of this atlas. */
  turnDivider() {
    if (!this.divided) {
      const { sheets } = this.epoch;
      const next = sheets[(sheets.indexOf(this.sheet) + 1) % sheets.length];
      return this.set({ sides: [this.side, { ...this.side, sheetName: next.name, how: '', mateName: '' }], held: 1 });
    }
    this.set({ sides: [this.atlas === this.home ? this.side : this.sides[0]], held: 0 });
  }

  /** Takes a side in hand. @param {number} held */
  hold(held) {
    if (held < this.sides.length) this.set({ held, second: false });
  }

  // Depth --------------------------------------------------------------------------------------------------------

  /** The depth window as slabs of an atlas. @param {Atlas} atlas */
  slabsFor(atlas) {
    return this.depth ? atlas.slabsOf(...this.depth) : /** @type {[number, number]} */ ([0, atlas.slabs]);
  }

  get slabs() {
    return this.slabsFor(this.atlas);
  }

  get wholeDepth() {
    return this.atlas.wholeDepth(this.slabs);
  }

  // Tones --------------------------------------------------------------------------------------------------------

  /** Sheets of one name and unit have one tone in all epochs and atlases, so that they can be compared. @param {Sheet} sheet */
  toneKey(sheet) {
    const ours = this.home.epochs.flatMap((e) => e.sheets).find((s) => s.name === sheet.name);
    return !ours || (ours.unit === sheet.unit && ours.coding === sheet.coding) ? sheet.name : `${sheet.name} ${sheet.unit} ${sheet.coding}`;
  }

  /** @param {Sheet} sheet @returns {Tone} */
  toneOf(sheet) {
    return this.tones[this.toneKey(sheet)] ?? this.usualTone(sheet);
  }

  /** @returns {Tone} */
  get tone() {
    return this.toneOf(this.toned);
  }

  /** Changes part of the tone in hand. @param {Partial<Tone>} patch */
  setTone(patch) {
    const tone = { ...this.tone, ...patch };
    if (!(tone.lo < tone.hi)) return;
    this.set({ tones: { ...this.tones, [this.toneKey(this.toned)]: tone } });
  }

  /** The tone a sheet begins with: from the percentiles of the whole. @param {Sheet} sheet @returns {Tone} */
  usualTone(sheet) {
    const key = this.toneKey(sheet);
    const known = this.usual.get(key);
    if (known) return known;
    const first = this.home.epochs.find((e) => e.sheets.some((s) => this.toneKey(s) === key)) ?? this.epoch;
    const tone = usualTone(first.sheets, first.sheets.find((s) => this.toneKey(s) === key) ?? sheet);
    this.usual.set(key, tone);
    return tone;
  }

  /** How a side is coloured. @param {Side} side @returns {import('./blend.js').Paint} */
  paintOf(side) {
    const mate = mateOf(side);
    const first = this.toneOf(sheetOf(side));
    return mate ? { how: side.how, tones: [first, this.toneOf(mate)] } : { how: '', tones: [first] };
  }

  // Link ---------------------------------------------------------------------------------------------------------

  /** What a link says of the state. @returns {Linked} */
  toLink() {
    const { home, depth, sides } = this;
    const [left, right] = sides;
    /** @type {Linked} */
    const link = {
      epoch: left.epoch === home.epochs[0] ? undefined : left.epoch.name,
      sheet: sheetOf(left).name,
      hue: left.how === 'hue' ? left.mateName : undefined,
      above: left.how === 'above' ? left.mateName : undefined,
      depth: depth ?? undefined,
      census: this.brush ?? undefined,
      object: this.object ?? undefined,
      lengths: this.lengths || undefined,
      markers: this.markers ? undefined : 'off',
      line: this.tape && !this.tape.closed ? this.tape.points : undefined,
      outline: this.tape?.closed ? this.tape.points : undefined,
      toned: this.second ? this.toned.name : undefined,
    };
    if (right) {
      Object.assign(link, {
        divide: this.divide,
        beside: sheetOf(right).name,
        'beside.atlas': right.atlas === home ? undefined : right.atlas.name,
        'beside.epoch': right.epoch === epochLike(right.atlas, left.epoch) ? undefined : right.epoch.name,
        'beside.hue': right.how === 'hue' ? right.mateName : undefined,
        'beside.above': right.how === 'above' ? right.mateName : undefined,
        hand: this.held ? 'beside' : undefined,
      });
    }
    for (const [sheet, end] of this.tonedSheets()) {
      const [tone, usual] = [this.toneOf(sheet), this.usualTone(sheet)];
      Object.assign(link, {
        [`tone${end}`]: tone.lo === usual.lo && tone.hi === usual.hi ? undefined : [tone.lo, tone.hi],
        [`curve${end}`]: tone.curve === usual.curve ? undefined : tone.curve,
        [`ramp${end}`]: tone.ramp === usual.ramp ? undefined : tone.ramp,
        [`hues${end}`]: tone.hues === usual.hues ? undefined : tone.hues,
      });
    }
    return link;
  }

  /** The sheets on screen and how a link tells their tones apart: the first has the plain words. @returns {[Sheet, string][]} */
  tonedSheets() {
    const shown = this.sides.flatMap((side) => [sheetOf(side), mateOf(side)]).filter((s) => s !== undefined);
    const by = new Map(shown.map((sheet) => [this.toneKey(sheet), sheet]));
    return [...by].map(([key, sheet], i) => [sheet, i ? `.${key}` : '']);
  }

  /**
   * Takes over what a link says; what it leaves out becomes as usual.
   * @param {Linked} link @param {(name: string) => Atlas|undefined} other atlases that are open, by name
   * @returns {Trouble}
   */
  fromLink(link, other) {
    const { home } = this;
    /** @type {Trouble} */ const trouble = [];
    const left = sideFrom(home, home.epochs[0], link.sheet, link.epoch, link.hue, link.above, trouble);
    this.sides = [left];
    if (link.divide !== undefined || link.beside !== undefined) {
      const name = link['beside.atlas'];
      const atlas = name === undefined ? home : other(name);
      if (!atlas) trouble.push(['trouble_beside', { name: name ?? '' }]);
      const { 'beside.epoch': epoch, 'beside.hue': hue, 'beside.above': above } = link;
      this.sides.push(sideFrom(atlas ?? home, epochLike(atlas ?? home, left.epoch), link.beside ?? left.sheetName, epoch, hue, above, trouble));
    }
    this.held = link.hand === 'beside' && this.divided ? 1 : 0;
    this.second = link.toned !== undefined && link.toned === this.mate?.name;
    this.divide = link.divide ?? 0.5;
    const slabs = link.depth ? home.slabsOf(...link.depth) : undefined;
    this.depth = slabs && !home.wholeDepth(slabs) ? [home.edges[slabs[0]], home.edges[slabs[1]]] : null;
    this.tones = { ...this.tones };
    for (const [sheet, end] of this.tonedSheets()) this.toneFromLink(link, sheet, end, trouble);
    this.brush = link.census ?? null;
    this.object = link.object ?? null;
    this.lengths = link.lengths ?? '';
    this.markers = link.markers !== 'off';
    this.tape = link.outline ? { points: link.outline, closed: true } : link.line ? { points: link.line, closed: false } : null;
    this.changed(new Set(['sides', 'epoch', 'object', 'slabs', 'tones', 'tape']));
    return trouble;
  }

  /** @param {Linked} link @param {Sheet} sheet @param {string} end of the words that are about it @param {Trouble} trouble */
  toneFromLink(link, sheet, end, trouble) {
    /** @type {Record<string, any>} */ const all = link;
    const [ends, curve, ramp, hues] = ['tone', 'curve', 'ramp', 'hues'].map((word) => all[word + end]);
    const tone = { ...this.usualTone(sheet) };
    if (ends && (sheet.coding === 'linear' || ends[0] > 0)) [tone.lo, tone.hi] = ends;
    if (curves(sheet).some((known) => known === curve)) tone.curve = curve;
    if (hues && HUES.includes(hues)) tone.hues = hues;
    if (ramp && RAMPS.includes(ramp)) tone.ramp = ramp;
    else if (ramp) trouble.push(['trouble_ramp', { name: ramp }]);
    if (ends || curve || ramp || hues) this.tones[this.toneKey(sheet)] = tone;
    else delete this.tones[this.toneKey(sheet)];
  }
}

/**
 * A side as a link names it; what is not there is said, and as usual.
 * @param {Atlas} atlas @param {Epoch} usual @param {string|undefined} sheet @param {string|undefined} epoch
 * @param {string|undefined} hue @param {string|undefined} above @param {Trouble} trouble
 * @returns {Side}
 */
function sideFrom(atlas, usual, sheet, epoch, hue, above, trouble) {
  const named = epoch === undefined ? usual : atlas.epochs.find((e) => e.name === epoch);
  if (!named) trouble.push(['trouble_epoch', { name: epoch ?? '' }]);
  const found = named ?? usual;
  const mateName = hue ?? above ?? '';
  for (const name of [sheet, mateName || undefined]) {
    if (name !== undefined && !atlas.sheet(found, name)) trouble.push(['trouble_sheet', { name }]);
  }
  const there = Boolean(mateName && atlas.sheet(found, mateName));
  /** @type {Side} */
  const side = { atlas, epoch: found, sheetName: sheet ?? '', how: '', mateName: '' };
  return chosen(side, there ? { how: hue === undefined ? 'above' : 'hue', mateName } : {});
}
