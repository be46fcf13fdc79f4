// Questions to the catalogue: which objects lie in view, how many at each rank. In: view, depth window, brush. Out:
// answers as they come, the newest only. Silence is borne: a question that failed is put again later.

/** @typedef {{row: number, u: number, v: number, depth: number, size: number|null, rank: number|null, id?: string|number, columns: Record<string, any>}} Found */
/** @typedef {{in_view: number, objects: Found[]}} Answer */

const LIMIT = 250;
const BINS = 48;

export class Catalogue {
  /** @param {import('./state.js').State} state @param {{objects(list: Found[]): void, census(counts: any): void}} listener */
  constructor(state, listener) {
    this.state = state;
    this.listener = listener;
    this.timer = 0;
    this.delay = 0;
    /** @type {AbortController|null} */ this.running = null;
    this.last = '';
    /** @type {import('./view.js').View|null} the view to ask about */ this.view = null;
  }

  /** @param {import('./view.js').View} view @param {number} wait ms until it is asked, so that a moving view asks only so often */
  ask(view, wait) {
    if (!this.state.epoch.catalogue) return;
    this.view = view;
    if (this.question(view) === this.last) return;
    if (this.timer && !this.delay) return;
    clearTimeout(this.timer);
    this.timer = window.setTimeout(() => this.put(), wait);
  }

  /** @param {import('./view.js').View} view */
  question({ bounds: { u0, u1, v0, v1 } }) {
    const { atlas, slabs, brush, epoch } = this.state;
    return JSON.stringify([atlas.id, epoch.name, u0, u1, v0, v1, slabs, brush]);
  }

  async put() {
    this.timer = 0;
    const { view } = this;
    if (!view) return;
    const key = this.question(view);
    this.running?.abort();
    const control = new AbortController();
    this.running = control;
    const { atlas, slabs, brush, epoch } = this.state;
    const { u0, u1, v0, v1 } = view.bounds;
    const [d0, d1] = [atlas.edges[slabs[0]], atlas.edges[slabs[1]]];
    const room = { u: (u1 - u0) / 4, v: (v1 - v0) / 4 };
    const wide = { u0: u0 - room.u, u1: u1 + room.u, v0: v0 - room.v, v1: v1 + room.v, d0, d1, limit: LIMIT, epoch: epoch.name };
    const filter = brush ? { lo: brush[0], hi: brush[1] } : {};
    const count = { u0, u1, v0, v1, d0, d1, bins: BINS, epoch: epoch.name };
    if (epoch.catalogue?.rank) Object.assign(count, { column: epoch.catalogue.rank });
    try {
      const [found, counts] = await Promise.all([
        question(`${atlas.base}objects`, { ...wide, ...filter }, control.signal),
        question(`${atlas.base}census`, count, control.signal),
      ]);
      if (control.signal.aborted) return;
      this.last = key;
      this.delay = 0;
      this.listener.objects(found.objects);
      this.listener.census(counts);
    } catch {
      if (control.signal.aborted) return;
      this.delay = Math.min(this.delay * 2 || 1000, 15000);
      clearTimeout(this.timer);
      this.timer = window.setTimeout(() => this.put(), this.delay);
    }
  }

  /** An object by its name, among all of a rectangle. @param {import('./view.js').Bounds} bounds @param {(found: Found) => boolean} wanted */
  async find({ u0, u1, v0, v1 }, wanted) {
    const answer = await question(`${this.state.atlas.base}objects`, { u0, u1, v0, v1, limit: 5000, epoch: this.state.epoch.name });
    return answer.objects.find(wanted);
  }
}

/** @param {string} name @param {Record<string, any>} what @param {AbortSignal} [signal] */
async function question(name, what, signal) {
  const query = new URLSearchParams(Object.entries(what).map(([k, v]) => [k, String(v)]));
  const answer = await fetch(`${name}?${query}`, { signal });
  if (!answer.ok) throw new Error(`${name}: ${answer.status}`);
  return answer.json();
}
