// The keyboard: everything a hand can do, and a list of the keys. In: key events anywhere on the page but in a field that
// takes text. Out: calls on the frame.

import { make } from './dom.js';
import { HOWS } from './side.js';
import { keyList, say } from './words.js';

/** @param {import('./app.js').Frame} frame */
export function keyboard(frame) {
  const { state } = frame;
  const travel = (/** @type {KeyboardEvent} */ event, /** @type {number} */ du, /** @type {number} */ dv) => {
    const { view } = frame.motion;
    const part = event.shiftKey ? 0.5 : 0.12;
    const side = Math.min(view.w, view.h) * part;
    frame.glide(du * side, dv * side);
  };
  const zoom = (/** @type {number} */ factor) => frame.motion.zoomBy(frame.motion.view.w / 2, frame.motion.view.h / 2, factor);
  const step = (/** @type {number} */ by) => {
    const { epochs } = state.atlas;
    state.set({ epoch: epochs[(epochs.indexOf(state.epoch) + by + epochs.length) % epochs.length] });
  };
  /** @type {Record<string, (event: KeyboardEvent) => void>} */
  const does = {
    ArrowLeft: (e) => travel(e, 1, 0),
    ArrowRight: (e) => travel(e, -1, 0),
    ArrowUp: (e) => travel(e, 0, 1),
    ArrowDown: (e) => travel(e, 0, -1),
    '+': () => zoom(1.5),
    '=': () => zoom(1.5),
    '-': () => zoom(1 / 1.5),
    _: () => zoom(1 / 1.5),
    0: () => frame.motion.fly(frame.motion.limits.whole(frame.motion.view)),
    b: () => state.set({ how: HOWS[(HOWS.indexOf(state.how) + 1) % HOWS.length] }),
    o: () => state.mate && state.set({ second: !state.second }),
    v: () => state.turnDivider(),
    s: () => state.hold(1 - state.held),
    e: () => step(1),
    E: () => step(-1),
    a: () => frame.tone.auto(),
    A: () => frame.tone.reset(),
    l: () => frame.tone.next('curve'),
    r: () => frame.tone.next('ramp'),
    '[': () => frame.depth.slide(-1),
    ']': () => frame.depth.slide(1),
    '{': () => frame.depth.widen(-1),
    '}': () => frame.depth.widen(1),
    '\\': () => frame.depth.whole(),
    w: () => frame.depth.turnPlay(),
    n: () => frame.markers.walk(1, frame.motion.view),
    p: () => frame.markers.walk(-1, frame.motion.view),
    g: () => frame.markers.chosen && frame.goTo(frame.markers.chosen),
    m: () => state.set({ markers: !state.markers }),
    u: () => frame.scale.turn(),
    t: () => frame.takeTape(),
    Enter: () => frame.tape.enter(),
    Backspace: () => frame.tape.back(),
    y: () => frame.copy(frame.tapeNote.all(), say('tape')),
    c: () => frame.copyReading(),
    k: () => frame.linking.copy(),
    d: () => frame.looks.turn(),
    '?': () => frame.showKeys(),
    Escape: () => frame.putAway(),
  };
  for (let i = 1; i <= 9; i++) {
    does[i] = () => {
      const sheet = state.epoch.sheets[i - 1];
      if (sheet) state.set({ sheetName: sheet.name });
    };
  }
  addEventListener('keydown', (event) => {
    if (event.ctrlKey || event.metaKey || event.altKey || event.defaultPrevented) return;
    if (/^(INPUT|TEXTAREA|SELECT)$/.test(/** @type {Element} */ (event.target).tagName)) return;
    if (event.key === 'Enter' && /^(BUTTON|A)$/.test(/** @type {Element} */ (event.target).tagName)) return;
    const action = does[event.key];
    if (!action) return;
    action(event);
    event.preventDefault();
  });
}

/** The list of keys, for the right margin. @param {() => void} close */
export function keysNote(close) {
  const list = make('dl.keys', {});
  for (const [key, what] of keyList()) list.append(make('dt', {}, key), make('dd', {}, what));
  const done = make('button.word.act', { type: 'button', click: close }, say('keys_close'));
  return [make('h2', {}, say('keys')), list, make('div.words', {}, done)];
}
