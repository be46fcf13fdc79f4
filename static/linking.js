// Keeps the address of the page in step with the view, and the view with the address. In: view and state; a link that was
// followed or typed. Out: the address, a word that copies it.

import { make } from './dom.js';
import { read, settled, write } from './link.js';
import { say } from './words.js';

export class Linking {
  /** @param {import('./app.js').Frame} frame */
  constructor(frame) {
    this.frame = frame;
    this.timer = 0;
    /** what the address was when it was last written or followed */ this.known = location.hash;
    this.word = make('button.word.act', { type: 'button', click: () => this.copy() }, say('link_copy'));
    addEventListener('hashchange', () => this.follow(true));
  }

  /** The address follows when things have come to rest. */
  soon() {
    clearTimeout(this.timer);
    this.timer = window.setTimeout(() => this.write(), 150);
  }

  /** Whether the address is still to follow. */
  get pending() {
    return this.timer !== 0;
  }

  write() {
    const { motion, hand, state } = this.frame;
    clearTimeout(this.timer);
    this.timer = 0;
    if (motion.moving || hand.classList.contains('moving')) return this.soon();
    const { view } = motion;
    const snapped = motion.limits.clamp(view.with(settled(view)));
    if (!snapped.equals(view)) {
      // The view becomes exactly what the link says; the difference is below a hundredth of a pixel.
      motion.view = snapped;
    }
    this.frame.wake();
    const link = write({ ...settled(snapped), ...state.toLink() });
    // An address that was changed by hand and is still to be followed is not written over.
    if (link === location.hash || location.hash !== this.known) return;
    history.replaceState(history.state, '', link);
    this.known = location.hash;
  }

  /** Goes where the address says. @param {boolean} fly */
  async follow(fly) {
    const { motion, neighbours, state, status } = this.frame;
    const { hash } = location;
    const { view: link, bad } = read(hash);
    const other = link['beside.atlas'];
    if (other && !neighbours.opened.has(other)) await neighbours.open(other);
    this.known = hash;
    // A link means the same wherever one was before: what it leaves out comes from the first view. The place comes first,
    // so that no tile of the sheet is asked for at the old one.
    const goal = motion.limits.filled(motion.view).with(link);
    if (fly) motion.fly(goal);
    else motion.jump(goal);
    const trouble = state.fromLink(link, (name) => neighbours.opened.get(name));
    if (bad.length) trouble.push(['trouble_link', { part: bad[0] }]);
    for (const [key, fill] of trouble) status.say(say(key, fill), { stay: 9000 });
  }

  async copy() {
    const { motion, hand, status } = this.frame;
    motion.stop();
    hand.classList.remove('moving');
    this.write();
    const done = await navigator.clipboard?.writeText(location.href).then(() => true, () => false);
    this.word.textContent = done ? say('link_copied') : say('link_copy');
    if (!done) status.say(say('link_shown'));
    setTimeout(() => (this.word.textContent = say('link_copy')), 2000);
  }
}
