// On a narrow screen each edge is a thin strip that opens under the thumb. In: presses and focus. Out: which edge is open,
// and a drag that began on a strip handed on to what it moves.

const NARROW = '(max-width: 760px), (max-height: 480px)';
const SLOP = 8;

/** The handle of an edge that a press means: the one it is on, or else the nearest. @param {HTMLElement} edge @param {number} x @param {number} y */
function meant(edge, x, y) {
  const away = (/** @type {Element} */ grip) => {
    const { left, right, top, bottom } = grip.getBoundingClientRect();
    // Of two that are equally near, the smaller: the end of a window before the window.
    return Math.hypot(Math.max(left - x, x - right, 0), Math.max(top - y, y - bottom, 0)) + 0.01 * Math.min(right - left, bottom - top);
  };
  return [...edge.querySelectorAll('.handle')].sort((a, b) => away(a) - away(b))[0];
}

/** Hands a drag on to a handle, once it is a drag. @param {HTMLElement} edge @param {PointerEvent} press */
function handOn(edge, press) {
  const { pointerId, clientX, clientY } = press;
  const over = new AbortController();
  const same = { capture: true, signal: over.signal };
  addEventListener('pointermove', (event) => {
    if (event.pointerId !== pointerId || Math.hypot(event.clientX - clientX, event.clientY - clientY) < SLOP) return;
    over.abort();
    const grip = meant(edge, clientX, clientY);
    grip?.dispatchEvent(new PointerEvent('pointerdown', { pointerId, clientX, clientY, pointerType: press.pointerType, isPrimary: press.isPrimary }));
  }, same);
  for (const name of ['pointerup', 'pointercancel']) addEventListener(name, (event) => /** @type {PointerEvent} */ (event).pointerId === pointerId && over.abort(), same);
}

/** @param {HTMLElement} hand the map, which closes what is open when it is touched */
export function folding(hand) {
  const edges = /** @type {HTMLElement[]} */ ([...document.querySelectorAll('.edge')]);
  const narrow = matchMedia(NARROW);
  const open = (/** @type {HTMLElement|null} */ which) => {
    for (const edge of edges) edge.classList.toggle('open', edge === which);
  };
  for (const edge of edges) {
    // In the capturing phase, so that the edge is open before the instrument takes the press.
    edge.addEventListener('pointerdown', (event) => {
      if (!narrow.matches || edge.classList.contains('open')) return;
      open(edge);
      handOn(edge, event);
      event.stopPropagation();
    }, { capture: true });
    edge.addEventListener('focusin', () => narrow.matches && open(edge));
  }
  hand.addEventListener('pointerdown', () => open(null));
  addEventListener('keydown', (event) => event.key === 'Escape' && open(null));
  narrow.addEventListener('change', () => open(null));
}
