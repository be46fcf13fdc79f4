// On a narrow screen each edge is a thin strip that opens under the thumb. In: presses and focus. Out: which edge is open.

const NARROW = '(max-width: 760px), (max-height: 480px)';

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
      event.stopPropagation();
    }, { capture: true });
    edge.addEventListener('focusin', () => narrow.matches && open(edge));
  }
  hand.addEventListener('pointerdown', () => open(null));
  addEventListener('keydown', (event) => event.key === 'Escape' && open(null));
  narrow.addEventListener('change', () => open(null));
}
