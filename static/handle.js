// What a hand can move on an edge: a slider with a name, a value in words, keys, and a drag. The instruments place it.

import { dress, make } from './dom.js';

/**
 * @typedef {object} Grip
 * @property {string} name accessible name
 * @property {'horizontal'|'vertical'} along
 * @property {(steps: number) => void} nudge by steps; Infinity for the end
 * @property {(x: number, y: number) => void} drag to a place, CSS pixels in the track
 * @property {(x: number, y: number) => void} [begin] at the start of a drag, at a place in the track
 * @property {() => void} [reset] on a double click
 * @property {() => void} [type] on Enter, where a number can be typed
 */

/**
 * @param {HTMLElement} track the element that drags are measured in
 * @param {Grip} grip
 */
export function handle(track, grip) {
  const root = make(`div.handle.${grip.along}`, {
    role: 'slider',
    tabindex: 0,
    'aria-label': grip.name,
    'aria-orientation': grip.along,
  });
  let at = [0, 0];
  let offset = [0, 0];

  root.addEventListener('pointerdown', (event) => {
    if (event.button !== 0) return;
    root.setPointerCapture(event.pointerId);
    const box = track.getBoundingClientRect();
    offset = [event.clientX - box.left - at[0], event.clientY - box.top - at[1]];
    root.classList.add('held');
    grip.begin?.(event.clientX - box.left, event.clientY - box.top);
    event.stopPropagation();
  });
  root.addEventListener('pointermove', (event) => {
    if (!root.hasPointerCapture(event.pointerId)) return;
    const box = track.getBoundingClientRect();
    grip.drag(event.clientX - box.left - offset[0], event.clientY - box.top - offset[1]);
  });
  const release = () => root.classList.remove('held');
  root.addEventListener('pointerup', release);
  root.addEventListener('pointercancel', release);
  if (grip.reset) root.addEventListener('dblclick', grip.reset);

  root.addEventListener('keydown', (event) => {
    if (event.key === 'Enter' && grip.type) {
      grip.type();
      event.preventDefault();
      event.stopPropagation();
      return;
    }
    const steps = {
      ArrowUp: 1, ArrowRight: 1, ArrowDown: -1, ArrowLeft: -1,
      PageUp: 10, PageDown: -10, End: Infinity, Home: -Infinity,
    }[event.key];
    if (steps === undefined || event.ctrlKey || event.metaKey || event.altKey) return;
    grip.nudge(event.shiftKey ? steps * 5 : steps);
    event.preventDefault();
    event.stopPropagation();
  });

  return {
    root,
    /**
     * @param {number} x CSS pixels in the track @param {number} y
     * @param {{now: number, min: number, max: number, text: string}} value
     */
    place(x, y, { now, min, max, text }) {
      at = [x, y];
      root.style.transform = `translate(${x.toFixed(2)}px, ${y.toFixed(2)}px)`;
      dress(root, { 'aria-valuenow': now, 'aria-valuemin': min, 'aria-valuemax': max, 'aria-valuetext': text });
    },
  };
}
