// The upper left corner: what is looked at, and when; where there are several epochs, a word for each to step through in
// place. In: state. Out: another epoch.

import { make, words } from './dom.js';
import { fixed } from './units.js';
import { LOCALE, say } from './words.js';

/** @typedef {import('./atlas.js').Epoch} Epoch */

export class Title {
  /** @param {HTMLElement} root @param {import('./state.js').State} state */
  constructor(root, state) {
    this.state = state;
    const { json, title } = state.home;
    document.title = title || say('untitled');
    document.documentElement.lang = LOCALE;
    this.words = words(say('epochs'), (name) => state.set({ epoch: state.atlas.epochs.find((e) => e.name === name) }));
    this.facts = make('div.dim');
    root.append(make('h1', {}, make('a', { href: '../', title: json.about ?? '' }, title || say('untitled'))), make('div.when', {}, this.words.root, this.facts));
    this.draw();
  }

  draw() {
    const { atlas, epoch } = this.state;
    const several = atlas.epochs.length > 1;
    this.words.root.hidden = !several;
    const age = (/** @type {Epoch} */ { age_gyr: gyr }) => (gyr ? say('age', { age: fixed(gyr, 1) }) : '');
    // z once is enough.
    this.words.update(atlas.epochs.map((e, i) => ({ value: e.name, text: when(e, atlas, i === 0) || e.name, title: age(e) })), epoch.name);
    this.facts.textContent = several ? '' : [when(epoch, atlas), age(epoch)].filter(Boolean).join(' · ');
  }
}

/** @param {Epoch} epoch @param {import('./atlas.js').Atlas} atlas @param {boolean} [named] with what the number is */
function when({ redshift }, atlas, named = true) {
  if (typeof redshift !== 'number' || atlas.view.coordinates !== 'comoving') return '';
  return named ? say('epoch', { z: fixed(redshift, 2) }) : fixed(redshift, 2);
}
