// What the map shows, as a sentence whose words are the controls: a sheet, alone or with a second one, and what stands beside
// it. In: state, the neighbours. Out: choices.

import { dress, make, pick, words } from './dom.js';
import { HOWS } from './side.js';
import { say } from './words.js';

/** @typedef {import('./atlas.js').How} How */

export class Sheets {
  /** @param {HTMLElement} root @param {import('./state.js').State} state @param {import('./neighbours.js').Neighbours} neighbours */
  constructor(root, state, neighbours) {
    this.state = state;
    this.neighbours = neighbours;
    this.first = words(say('sheets'), (sheetName) => state.set({ sheetName }));
    this.first.root.classList.add('column');
    // On a narrow screen the whole sentence is one line, and the first sheet a word of it.
    this.narrow = pick(say('sheets'), (sheetName) => state.set({ sheetName }));
    this.narrow.root.classList.add('narrow');
    this.how = pick(say('how'), (how) => state.set({ how: /** @type {How} */ (how) }));
    this.mate = pick(say('mate'), (mateName) => state.set({ mateName }));
    this.atlas = pick(say('beside_atlas'), (name) => this.take(name));
    this.divide = make('button.word.act', { type: 'button', title: say('divide_title'), click: () => state.turnDivider() });
    this.clause = make('div.clause', {}, this.narrow.root, this.how.root, this.mate.root, this.atlas.root, this.divide);
    root.append(this.first.root, this.clause);
  }

  /** @param {string} name of an atlas; of this one when empty */
  async take(name) {
    const { state } = this;
    const atlas = name ? await this.neighbours.open(name) : state.home;
    if (atlas) state.set({ atlas });
    else this.draw();
  }

  draw() {
    const { state, neighbours } = this;
    const { sheets } = state.epoch;
    const title = (/** @type {import('./atlas.js').Sheet} */ s) => s.title || s.name;
    this.first.update(sheets.map((s, i) => ({ value: s.name, text: title(s), title: say('sheet_key', { n: i + 1 }) })), state.sheet.name);
    this.narrow.update(sheets.map((s) => ({ value: s.name, text: title(s) })), state.sheet.name);
    this.how.update(HOWS.map((how) => ({ value: how, text: say(`how_${how || 'alone'}`) })), state.how);
    this.mate.update(sheets.filter((s) => s !== state.sheet).map((s) => ({ value: s.name, text: title(s) })), state.mate?.name ?? '');
    const others = [{ value: '', text: say('of_atlas', { title: state.home.title }) }];
    others.push(...neighbours.list.map(({ name, title: text }) => ({ value: name, text: say('of_atlas', { title: text }) })));
    this.atlas.update(others, state.atlas.name);
    dress(this.how.root, { hidden: sheets.length < 2 });
    dress(this.mate.root, { hidden: !state.mate });
    dress(this.atlas.root, { hidden: !state.held || others.length < 2 });
    this.divide.textContent = say(state.divided ? 'divide_end' : 'divide');
  }
}
