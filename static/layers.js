// The layers that the state asks for: one for each side of the map, each made once. In: state. Out: layers.

import { Layer } from './atlas.js';
import { mateOf, sheetOf } from './side.js';

/** @typedef {import('./side.js').Side} Side */
/** @typedef {import('./atlas.js').Slabs} Slabs */

export class Layers {
  /** @param {import('./state.js').State} state */
  constructor(state) {
    this.state = state;
    /** @type {Map<string, Layer>} */
    this.known = new Map();
  }

  /** @param {Side} side @param {Slabs} slabs */
  of(side, slabs) {
    const layer = new Layer(side.atlas, side.epoch, sheetOf(side), slabs, mateOf(side), side.how);
    const known = this.known.get(layer.id) ?? layer;
    this.known.set(layer.id, known);
    return known;
  }

  /** What is to be shown on each side, and how it is coloured. */
  get shown() {
    const { state } = this;
    return state.sides.map((side) => ({ layer: this.of(side, state.slabsFor(side.atlas)), paint: state.paintOf(side) }));
  }

  /** What each side would show through another window. @param {Slabs} window of the side in hand */
  through([a, b]) {
    const { edges } = this.state.atlas;
    return this.state.sides.map((side) => this.of(side, side.atlas.slabsOf(edges[a], edges[b])));
  }
}
