// The other atlases of the same server that can stand beside this one: those that look at the same volume the same way, so
// that a place is the same place in both. In: the list beside the atlas. Out: their names, and the atlases, opened when asked for.

import { Atlas } from './atlas.js';

/** @typedef {{name: string, title: string}} Neighbour */

export class Neighbours {
  /** @param {Atlas} home */
  constructor(home) {
    this.home = home;
    /** @type {Neighbour[]} */ this.list = [];
    /** @type {Map<string, Atlas>} */ this.opened = new Map();
  }

  /** Reads the list; where there is none, as with plain files, there are no neighbours. */
  async look() {
    const { id, view } = this.home;
    const all = await fetch('../atlases.json').then((answer) => (answer.ok ? answer.json() : []), () => []);
    const alike = (/** @type {any} */ a) => a.id !== id && ['unit', 'coordinates', 'axes', 'box'].every((key) => String(a.view[key]) === String(view[key]));
    this.list = all.filter(alike).map((/** @type {Neighbour} */ { name, title }) => ({ name, title: title || name }));
    // Runs of one volume may have one title: then the name tells them apart.
    const titles = [this.home.title, ...this.list.map(({ title }) => title)];
    for (const each of this.list) if (titles.indexOf(each.title) !== titles.lastIndexOf(each.title)) each.title += ` (${each.name})`;
  }

  /** @param {string} name @returns {Promise<Atlas|undefined>} undefined where it cannot be had */
  async open(name) {
    if (!this.opened.has(name)) {
      const atlas = await Atlas.open(`../${encodeURIComponent(name)}/`, name).catch(() => undefined);
      if (atlas) this.opened.set(name, atlas);
    }
    return this.opened.get(name);
  }

  /** What an atlas is called here. @param {Atlas} atlas */
  titleOf(atlas) {
    return atlas === this.home ? atlas.title : (this.list.find(({ name }) => name === atlas.name)?.title ?? atlas.title);
  }
}
