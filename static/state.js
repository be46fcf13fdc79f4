// What is chosen, besides the place: epoch, sheet, depth window, tones, brush, object, lengths. One plain object, changed
// only through set(); a link is this state and the view written out, with what is as usual left out.

import { curves } from './lut.js';
import { RAMPS } from './ramps.js';
import { rounded } from './link.js';

/** @typedef {import('./atlas.js').Atlas} Atlas */
/** @typedef {import('./atlas.js').Epoch} Epoch */
/** @typedef {import('./atlas.js').Sheet} Sheet */
/** @typedef {import('./lut.js').Tone} Tone */
/** @typedef {import('./link.js').Linked} Linked */

export class State {
  /** @param {Atlas} atlas @param {(changed: Set<string>) => void} changed */
  constructor(atlas, changed) {
    this.atlas = atlas;
    this.changed = changed;
    /** @type {Epoch} */ this.epoch = atlas.epochs[0];
    /** @type {string} */ this.sheetName = this.epoch.sheets[0].name;
    /** @type {[number, number]} */ this.slabs = [0, atlas.slabs];
    /** @type {Record<string, Tone>} by sheet name, where it is not the usual one */
    this.tones = {};
    /** @type {[number, number]|null} */ this.brush = null;
    /** @type {string|null} */ this.object = null;
    /** @type {string} */ this.lengths = '';
    this.markers = true;
    /** @type {import('./tape.js').Laid|null} */ this.tape = null;
    /** @type {Map<string, Tone>} */
    this.usual = new Map();
  }

  /** @param {Partial<Pick<State, 'epoch'|'sheetName'|'slabs'|'tones'|'brush'|'object'|'lengths'|'markers'|'tape'>>} patch */
  set(patch) {
    /** @type {Record<string, any>} */ const now = this;
    const changed = new Set(Object.entries(patch).flatMap(([key, value]) => (value === now[key] ? [] : [key])));
    if (!changed.size) return;
    Object.assign(this, patch);
    this.changed(changed);
  }

  /** @returns {Sheet} */
  get sheet() {
    return this.atlas.sheet(this.epoch, this.sheetName) ?? this.epoch.sheets[0];
  }

  /** @returns {Tone} */
  get tone() {
    return this.tones[this.sheet.name] ?? this.usualTone(this.sheet);
  }

  /** Changes part of the tone of the sheet that is shown. @param {Partial<Tone>} patch */
  setTone(patch) {
    const tone = { ...this.tone, ...patch };
    if (!(tone.lo < tone.hi)) return;
    this.set({ tones: { ...this.tones, [this.sheet.name]: tone } });
  }

  get wholeDepth() {
    return this.slabs[0] === 0 && this.slabs[1] === this.atlas.slabs;
  }

  /** The tone a sheet begins with: from the percentiles of the whole. @param {Sheet} sheet @returns {Tone} */
  usualTone(sheet) {
    const key = `${this.epoch.name}/${sheet.name}`;
    let tone = this.usual.get(key);
    if (!tone) {
      tone = { ...usualEnds(sheet), curve: sheet.coding === 'log' ? 'log' : 'linear', ramp: usualRamp(this.epoch.sheets, sheet) };
      this.usual.set(key, tone);
    }
    return tone;
  }

  /** What a link says of the state. @returns {Linked} */
  toLink() {
    const { atlas, slabs } = this;
    const [tone, usual] = [this.tone, this.usualTone(this.sheet)];
    return {
      epoch: this.epoch === atlas.epochs[0] ? undefined : this.epoch.name,
      sheet: this.sheet.name,
      depth: this.wholeDepth ? undefined : [atlas.edges[slabs[0]], atlas.edges[slabs[1]]],
      tone: tone.lo === usual.lo && tone.hi === usual.hi ? undefined : [tone.lo, tone.hi],
      curve: tone.curve === usual.curve ? undefined : tone.curve,
      ramp: tone.ramp === usual.ramp ? undefined : tone.ramp,
      census: this.brush ?? undefined,
      object: this.object ?? undefined,
      lengths: this.lengths || undefined,
      markers: this.markers ? undefined : 'off',
      line: this.tape && !this.tape.closed ? this.tape.points : undefined,
      outline: this.tape?.closed ? this.tape.points : undefined,
    };
  }

  /**
   * Takes over what a link says; what it leaves out becomes as usual.
   * @param {Linked} link
   * @returns {[import('./words.js').Word, Record<string, string>][]} words about what the atlas does not have
   */
  fromLink(link) {
    const { atlas } = this;
    /** @type {[import('./words.js').Word, Record<string, string>][]} */
    const trouble = [];
    const epoch = link.epoch ? atlas.epochs.find((e) => e.name === link.epoch) : atlas.epochs[0];
    if (!epoch) trouble.push(['trouble_epoch', { name: link.epoch ?? '' }]);
    this.epoch = epoch ?? atlas.epochs[0];
    const sheet = link.sheet ? atlas.sheet(this.epoch, link.sheet) : this.epoch.sheets[0];
    if (!sheet) trouble.push(['trouble_sheet', { name: link.sheet ?? '' }]);
    this.sheetName = (sheet ?? this.epoch.sheets[0]).name;
    const { sheet: shown } = this;
    const tone = { ...this.usualTone(shown) };
    if (link.tone && (shown.coding === 'linear' || link.tone[0] > 0)) [tone.lo, tone.hi] = link.tone;
    const curve = curves(shown).find((c) => c === link.curve);
    if (curve) tone.curve = curve;
    if (link.ramp && RAMPS.includes(link.ramp)) tone.ramp = link.ramp;
    else if (link.ramp) trouble.push(['trouble_ramp', { name: link.ramp }]);
    const tones = { ...this.tones };
    delete tones[shown.name];
    if (link.tone || link.curve || link.ramp) tones[shown.name] = tone;
    this.changed(new Set());
    this.set({
      slabs: link.depth && sheet ? atlas.slabsOf(...link.depth) : [0, atlas.slabs],
      tones,
      brush: link.census ?? null,
      object: link.object ?? null,
      lengths: link.lengths ?? '',
      markers: link.markers !== 'off',
      tape: link.outline ? { points: link.outline, closed: true } : link.line ? { points: link.line, closed: false } : null,
    });
    return trouble;
  }
}

/** @param {Sheet} sheet */
function usualEnds(sheet) {
  const p = sheet.percentiles ?? {};
  const [least, most] = sheet.range ?? [1, 10];
  const log = sheet.coding === 'log';
  let lo = p[log ? '25' : '1'] ?? least;
  let hi = p[log ? '99.9' : '99'] ?? most;
  if (log) {
    // The brightest knots are far above any percentile of the area: leave them a third of the way to the top.
    if (most > hi) hi *= (most / hi) ** 0.35;
    if (!(lo > 0)) lo = hi / 1e4;
    // A sheet that is nearly empty, such as stars, would begin in the noise.
    lo = Math.max(lo, hi / 1e6);
  }
  if (!(lo < hi)) [lo, hi] = log ? [hi / 10, hi * 1.001] : [lo - 1, lo + 1];
  return { lo: rounded(lo, 3), hi: rounded(hi, 3) };
}

/** Each sheet its own ramp, by what it shows. @param {Sheet[]} sheets @param {Sheet} sheet */
function usualRamp(sheets, sheet) {
  const about = `${sheet.name} ${sheet.title} ${/** @type {any} */ (sheet).species ?? ''}`.toLowerCase();
  if (sheet.weight) return 'kelpfire';
  if (/star|stellar/.test(about)) return 'starwort';
  if (/dark|dm\b/.test(about)) return 'undertow';
  if (/gas/.test(about)) return 'strandline';
  return ['strandline', 'lichen', 'heather', 'undertow'][sheets.indexOf(sheet) % 4];
}
