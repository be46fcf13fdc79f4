// A number typed in the place where it is shown. In: the place, what is there now. Out: the number, or nothing when it was
// given up.

import { make } from './dom.js';
import { plain } from './units.js';

/**
 * @param {HTMLElement} parent @param {string} name accessible name @param {number} now
 * @param {(value: number|null) => void} done null when it was given up or is no number
 * @returns {HTMLInputElement} to be placed
 */
export function typed(parent, name, now, done) {
  const field = /** @type {HTMLInputElement} */ (make('input.typed', { 'aria-label': name, inputmode: 'decimal', value: plain(now), spellcheck: false }));
  let over = false;
  const end = (/** @type {boolean} */ keep) => {
    if (over) return;
    over = true;
    // 1.2×10^5 and a decimal comma are understood too.
    const text = field.value.replace(/\s/g, '').replace(',', '.').replace(/[×·x*]10\^?/i, 'e').replace('−', '-');
    field.remove();
    done(keep && text !== '' && Number.isFinite(Number(text)) ? Number(text) : null);
  };
  field.addEventListener('keydown', (event) => {
    event.stopPropagation();
    if (event.key === 'Enter') end(true);
    if (event.key === 'Escape') end(false);
  });
  field.addEventListener('blur', () => end(true));
  field.addEventListener('pointerdown', (event) => event.stopPropagation());
  parent.append(field);
  field.focus();
  field.select();
  return field;
}
