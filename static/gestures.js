// Hands on the map: drag and fling, wheel, pinch, tap and double tap, with mouse, pen or fingers alike. In: pointer events
// on one element. Out: calls on the motion, and taps and hovers for others to use.

/** @typedef {{move(x: number, y: number): void, end(x: number, y: number, tap: boolean): void, cancel(): void}} Stroke */
/**
 * @typedef {object} Hands
 * @property {(x: number, y: number, touch: boolean) => void} tap @property {(x: number|null, y: number|null) => void} hover
 * @property {() => void} settled @property {() => void} begin
 * @property {(x: number, y: number, touch: boolean) => Stroke|null} press takes a press for itself; then the map stays
 */

const TAP_SLOP = 8;
const TAP_TIME = 350;
const DOUBLE_TIME = 300;

/** A wheel zooms by at most so much an event, and so much a second (natural logarithm of the factor). */
const WHEEL_MOST = 0.35;
const WHEEL_PACE = 5;

/**
 * What a wheel asks for, as a factor of zoom. Wheels differ a hundredfold in what they send: fast ones are held back.
 * @returns {(event: WheelEvent) => number}
 */
export function wheelFactor() {
  let last = -1e9;
  return (event) => {
    event.preventDefault();
    // A line is about 18 pixels; a pinch on a trackpad comes as a wheel with ctrl and small steps.
    const pixels = event.deltaY * (event.deltaMode === 1 ? 18 : event.deltaMode === 2 ? 400 : 1);
    const most = Math.min(0.05 + (WHEEL_PACE * (event.timeStamp - last)) / 1000, WHEEL_MOST);
    last = event.timeStamp;
    return Math.exp(-Math.min(Math.max(pixels * (event.ctrlKey ? 0.01 : 0.0022), -most), most));
  };
}

/**
 * @param {HTMLElement} element
 * @param {() => import('./motion.js').Motion} motionOf
 * @param {Hands} hands
 */
export function listen(element, motionOf, hands) {
  /** @type {Map<number, [number, number]>} */
  const down = new Map();
  /** @type {[number, number, number][]} time, x, y of the last moves */
  let trail = [];
  let travelled = 0;
  let pressed = 0;
  let lastTap = { at: -1e9, x: 0, y: 0 };
  let wheelRest = 0;
  /** @type {Stroke|null} */
  let stroke = null;
  const turned = wheelFactor();

  /** @param {{clientX: number, clientY: number}} event @returns {[number, number]} */
  const place = (event) => {
    const box = element.getBoundingClientRect();
    return [event.clientX - box.left, event.clientY - box.top];
  };

  element.addEventListener('pointerdown', (event) => {
    if (event.button !== 0) return;
    element.setPointerCapture(event.pointerId);
    motionOf().stop();
    down.set(event.pointerId, place(event));
    stroke?.cancel();
    stroke = down.size === 1 ? hands.press(...place(event), event.pointerType === 'touch') : null;
    if (!stroke) hands.begin();
    if (down.size === 1) {
      trail = [];
      travelled = 0;
      pressed = event.timeStamp;
    } else travelled = Infinity;
  });

  element.addEventListener('pointermove', (event) => {
    const [x, y] = place(event);
    if (event.pointerType !== 'touch') hands.hover(x, y);
    const before = down.get(event.pointerId);
    if (!before) return;
    if (down.size === 1) {
      travelled += Math.hypot(x - before[0], y - before[1]);
      if (travelled < TAP_SLOP && (stroke || event.pointerType === 'touch')) return;
      down.set(event.pointerId, [x, y]);
      if (stroke) return stroke.move(x, y);
      trail.push([event.timeStamp, x, y]);
      trail = trail.filter(([t]) => event.timeStamp - t < 100);
      motionOf().drag(x - before[0], y - before[1]);
      return;
    }
    const [a, b] = [...down.values()];
    down.set(event.pointerId, [x, y]);
    const [c, d] = [...down.values()];
    const motion = motionOf();
    const factor = Math.hypot(c[0] - d[0], c[1] - d[1]) / Math.max(Math.hypot(a[0] - b[0], a[1] - b[1]), 1);
    motion.drag((c[0] + d[0] - a[0] - b[0]) / 2, (c[1] + d[1] - a[1] - b[1]) / 2);
    motion.pinch((c[0] + d[0]) / 2, (c[1] + d[1]) / 2, factor);
  });

  /** @param {PointerEvent} event */
  const up = (event) => {
    if (!down.delete(event.pointerId)) return;
    if (down.size > 0) {
      trail = [];
      return;
    }
    const [x, y] = place(event);
    if (stroke) {
      const ended = stroke;
      stroke = null;
      if (event.type === 'pointerup') ended.end(x, y, travelled < TAP_SLOP);
      else ended.cancel();
    } else if (event.type === 'pointerup' && travelled < TAP_SLOP && event.timeStamp - pressed < TAP_TIME) {
      const twice = event.timeStamp - lastTap.at < DOUBLE_TIME && Math.hypot(x - lastTap.x, y - lastTap.y) < 24;
      lastTap = twice ? { at: -1e9, x, y } : { at: event.timeStamp, x, y };
      if (twice) motionOf().zoomBy(x, y, event.shiftKey ? 0.5 : 2);
      else hands.tap(x, y, event.pointerType === 'touch');
    } else if (trail.length > 1 && event.timeStamp - trail[trail.length - 1][0] < 60) {
      const [[t0, x0, y0], [t1, x1, y1]] = [trail[0], trail[trail.length - 1]];
      if (t1 > t0) motionOf().fling((x1 - x0) / (t1 - t0), (y1 - y0) / (t1 - t0));
    }
    hands.settled();
  };
  element.addEventListener('pointerup', up);
  element.addEventListener('pointercancel', up);
  element.addEventListener('pointerleave', () => down.size === 0 && hands.hover(null, null));

  element.addEventListener(
    'wheel',
    (event) => {
      const [x, y] = place(event);
      hands.begin();
      motionOf().zoomBy(x, y, turned(event));
      clearTimeout(wheelRest);
      wheelRest = window.setTimeout(hands.settled, 150);
    },
    { passive: false },
  );
}
