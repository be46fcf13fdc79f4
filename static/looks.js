// How the frame looks and speaks: the room around the map dark or light, and the language. In: a press of a word, what was
// kept from the last visit. Out: words that switch, and the room's name on the document, which the style sheets ask for.

import { make } from './dom.js';
import { keep, recall } from './kept.js';
import { others, say, speak } from './words.js';

/** The colour of the room for what the browser draws around the page, as --room in frame.css. */
const ROOMS = { dark: '#0b0c10', light: '#f3f2ee' };

export class Looks {
  constructor() {
    this.word = make('button.word.act', { type: 'button', click: () => this.turn() });
    this.languages = others().map(({ language, name, title }) => make('button.word.act', { type: 'button', lang: language, title, click: () => speak(language) }, name));
    this.show(recall('room') === 'light' ? 'light' : 'dark');
  }

  /** Dark is the usual one, whatever the system likes: the map glows, and ramps are made for a dark room. @param {'dark'|'light'} room */
  show(room) {
    this.room = room;
    document.documentElement.dataset.room = room;
    document.querySelector('meta[name=theme-color]')?.setAttribute('content', ROOMS[room]);
    const next = room === 'dark' ? 'light' : 'dark';
    this.word.textContent = say(next);
    this.word.title = say(`${next}_title`);
  }

  turn() {
    this.show(this.room === 'dark' ? 'light' : 'dark');
    keep('room', /** @type {string} */ (this.room));
  }

  /** Words for the corner of links. */
  get words() {
    return [...this.languages, this.word];
  }
}
