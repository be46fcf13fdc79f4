// Everything that moves the view over time: flings, smooth zooming about a point, flights to a place. In: intentions.
// Out: one new view per frame, always inside the limits. Motion can be turned off; then everything happens at once.

/** @typedef {import('./view.js').View} View */
/** @typedef {import('./view.js').Limits} Limits */

/** A fling loses its speed with this time constant, a zoom covers its way with that one (ms). */
const FLING = 300;
const ZOOM = 75;
/** van Wijk & Nuij (2003), IEEE InfoVis: rho sets how high a flight rises; 1.4 is their value from a user study. */
const RHO = 1.4;

export class Motion {
  /** @param {View} view @param {Limits} limits @param {(view: View) => void} moved */
  constructor(view, limits, moved) {
    this.view = limits.clamp(view);
    this.limits = limits;
    this.moved = moved;
    this.calm = matchMedia('(prefers-reduced-motion: reduce)');
    this.velocity = [0, 0];
    /** @type {{x: number, y: number, left: number}|null} what is left of a zoom, as the logarithm of the factor */
    this.zoom = null;
    /** @type {((t: number) => View)|null} */
    this.flight = null;
    this.flown = 0;
    this.flightTime = 0;
    this.last = 0;
  }

  get moving() {
    return Boolean(this.zoom || this.flight || this.velocity[0] || this.velocity[1]);
  }

  /** @param {View} view */
  set(view) {
    const next = this.limits.clamp(view);
    if (next.equals(this.view)) return;
    this.view = next;
    this.moved(next);
  }

  stop() {
    this.velocity = [0, 0];
    this.zoom = null;
    this.flight = null;
  }

  /** @param {View} view */
  jump(view) {
    this.stop();
    this.set(view);
  }

  /** Dragged by CSS pixels. @param {number} dx @param {number} dy */
  drag(dx, dy) {
    this.velocity = [0, 0];
    this.flight = null;
    this.set(this.view.panned(dx, dy));
  }

  /** Let go with a velocity, CSS pixels per ms. @param {number} vx @param {number} vy */
  fling(vx, vy) {
    if (this.calm.matches || Math.hypot(vx, vy) < 0.08) return;
    this.velocity = [vx, vy];
    this.moved(this.view);
  }

  /** Closer or wider by a factor at once, about a point: a pinch. @param {number} x @param {number} y @param {number} factor */
  pinch(x, y, factor) {
    this.stop();
    this.set(this.kept(x, y, factor));
  }

  /** Closer or wider by a factor over a moment; further calls add up. @param {number} x @param {number} y @param {number} factor */
  zoomBy(x, y, factor) {
    this.velocity = [0, 0];
    this.flight = null;
    if (this.calm.matches) return this.pinch(x, y, factor);
    this.zoom = { x, y, left: (this.zoom?.left ?? 0) + Math.log(factor) };
    this.moved(this.view);
  }

  /** A zoom that stops at the limits instead of sliding along them. @param {number} x @param {number} y @param {number} factor */
  kept(x, y, factor) {
    const { view, limits } = this;
    const width = Math.min(Math.max(view.width / factor, limits.narrowest(view)), limits.widest(view));
    return view.zoomed(x, y, view.width / width);
  }

  /** @param {View} view where to go */
  fly(view) {
    const goal = this.limits.clamp(view);
    this.stop();
    if (this.calm.matches) return this.set(goal);
    const { path, length } = flight(this.view, goal);
    this.flight = path;
    this.flown = 0;
    this.flightTime = Math.min(Math.max(260 * length, 220), 2600);
    this.moved(this.view);
  }

  /** One frame. @param {number} now ms */
  step(now) {
    const dt = Math.min(Math.max(now - this.last, 1), 50);
    this.last = now;
    if (this.flight) {
      this.flown = Math.min(this.flown + dt / this.flightTime, 1);
      const t = this.flown;
      const path = this.flight;
      if (t === 1) this.flight = null;
      this.set(path(t * t * (3 - 2 * t)).resized(this.view.w, this.view.h));
    }
    if (this.zoom) {
      const { x, y, left } = this.zoom;
      const part = Math.abs(left) < 0.002 ? left : left * (1 - Math.exp(-dt / ZOOM));
      const before = this.view.width;
      this.set(this.kept(x, y, Math.exp(part)));
      const stuck = this.view.width === before;
      this.zoom = part === left || stuck ? null : { x, y, left: left - part };
    }
    if (this.velocity[0] || this.velocity[1]) {
      const [vx, vy] = this.velocity;
      const before = this.view;
      this.set(this.view.panned(vx * dt, vy * dt));
      const keep = Math.exp(-dt / FLING);
      const slow = Math.hypot(vx, vy) < 0.01 || this.view.equals(before);
      this.velocity = slow ? [0, 0] : [vx * keep, vy * keep];
    }
  }
}

/**
 * The smooth way from one view to another: out, across and in again (van Wijk & Nuij 2003, equations 9 to 11).
 * @param {View} from @param {View} to
 * @returns {{path: (t: number) => View, length: number}} t from 0 to 1; length in their units
 */
export function flight(from, to) {
  const [w0, w1] = [from.width, to.width];
  const [du, dv] = [to.u - from.u, to.v - from.v];
  const way = Math.hypot(du, dv);
  if (way < 1e-6 * Math.min(w0, w1)) {
    const length = Math.abs(Math.log(w1 / w0)) / RHO;
    const path = (/** @type {number} */ t) => (t >= 1 ? to : from.with({ u: from.u + du * t, v: from.v + dv * t, width: w0 * (w1 / w0) ** t }));
    return { path, length };
  }
  const b = (/** @type {number} */ w, /** @type {number} */ sign) => (w1 * w1 - w0 * w0 + sign * RHO ** 4 * way * way) / (2 * w * RHO * RHO * way);
  const r = (/** @type {number} */ x) => Math.log(-x + Math.sqrt(x * x + 1));
  const r0 = r(b(w0, 1));
  const r1 = r(b(w1, -1));
  const length = (r1 - r0) / RHO;
  const path = (/** @type {number} */ t) => {
    if (t >= 1) return to;
    const s = t * length;
    const width = (w0 * Math.cosh(r0)) / Math.cosh(RHO * s + r0);
    const along = ((w0 / (RHO * RHO)) * (Math.cosh(r0) * Math.tanh(RHO * s + r0) - Math.sinh(r0))) / way;
    return from.with({ u: from.u + du * along, v: from.v + dv * along, width });
  };
  return { path, length: Math.abs(length) };
}
