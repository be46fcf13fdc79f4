// The frame: puts map, edges, markers and reading together. In: the atlas beside the document and the link in its address.
// Out: a view that a hand can move, and a link that brings it back.

import { Atlas } from './atlas.js';
import { CensusEdge, NONE } from './census.js';
import { DepthEdge } from './depth.js';
import { Divider } from './divider.js';
import { make } from './dom.js';
import { folding } from './folding.js';
import { listen } from './gestures.js';
import { PixelGrid } from './grid.js';
import { keyboard, keysNote } from './keys.js';
import { Layers } from './layers.js';
import { read } from './link.js';
import { Linking } from './linking.js';
import { Looks } from './looks.js';
import { MapSurface } from './map.js';
import { Markers } from './markers.js';
import { Motion } from './motion.js';
import { Neighbours } from './neighbours.js';
import { Catalogue } from './objects.js';
import { Reading } from './reading.js';
import { Rulers } from './rulers.js';
import { ScaleEdge } from './scale.js';
import { Sheets } from './sheets.js';
import { State } from './state.js';
import { Status } from './status.js';
import { Tape } from './tape.js';
import { TapeNote } from './tape-note.js';
import { Tiles } from './tiles.js';
import { Title } from './title.js';
import { ToneEdge } from './tone.js';
import { Limits, View } from './view.js';
import { say } from './words.js';

/** @param {string} id */
const at = (id) => /** @type {HTMLElement} */ (document.getElementById(id));

export class Frame {
  /** @param {Atlas} atlas @param {Neighbours} neighbours @param {Status} status */
  constructor(atlas, neighbours, status) {
    this.atlas = atlas;
    this.neighbours = neighbours;
    this.status = status;
    this.hand = at('hand');
    this.frameAsked = 0;
    /** @type {View|null} the view that tiles were asked ahead for */ this.aheadFor = null;
    this.timers = { tiles: 0, counts: 0, ahead: 0 };
    this.asked = { tiles: 0, counts: 0 };
    this.state = new State(atlas, (changed) => this.stateChanged(changed));
    this.layers = new Layers(this.state);
    this.tiles = new Tiles({
      arrived: (tile) => this.tileArrived(tile),
      trouble: (kind) => status.say(say(`trouble_${kind}`), { kind: 'server', stay: kind === 'server' ? 0 : 8000 }),
      fine: () => status.kind === 'server' && status.say(say('trouble_back'), { kind: 'server', stay: 2500 }),
      calm: () => status.clear('server'),
      gone: () => this.reopen(),
    });
    this.map = new MapSurface(/** @type {HTMLCanvasElement} */ (at('ground')), this.tiles, () => this.wake());
    this.size = this.measured();
    const view = new View(0, 0, 1, this.size.w, this.size.h);
    const limits = new Limits(atlas.bounds, atlas.pixel);
    this.motion = new Motion(limits.filled(view), limits, () => this.moved());
    this.markers = new Markers(/** @type {HTMLCanvasElement} */ (at('marks')), at('note'), this.state, {
      go: (found) => this.goTo(found),
      wake: () => this.wake(),
    });
    this.grid = new PixelGrid(this.map, () => this.wake());
    this.tone = new ToneEdge(at('tone'), this.state);
    this.scale = new ScaleEdge(at('scale'), this.state, () => this.motion);
    this.depth = new DepthEdge(at('depth'), at('depth-corner'), this.state, () => this.hand.getAttribute('aria-busy') === 'false');
    this.census = new CensusEdge(at('census'), at('census-corner'), this.state);
    const measure = () => this.scale.measure;
    this.reading = new Reading(at('reading'), this.state, this.map, {
      tell: (value) => this.tone.setReading(value),
      copy: () => this.copyReading(),
      measure,
    });
    this.rulers = new Rulers(this.state, measure);
    this.tape = new Tape(this.state, {
      view: () => this.motion.view,
      measure,
      wake: () => this.wake(),
      hint: (text) => (text ? status.say(text, { kind: 'tape', stay: 0 }) : status.clear('tape')),
      taken: (taken) => this.tapeTaken(taken),
    });
    this.tapeNote = new TapeNote(at('tape'), this.state, { measure, copy: (text, name) => this.copy(text, name), away: () => this.tape.away() });
    this.tapeWord = make('button.word.act', { type: 'button', 'aria-pressed': 'false', title: say('tape_take_title'), click: (event) => this.takeTape(event.detail === 0) }, say('tape_take'));
    this.catalogue = new Catalogue(this.state, {
      objects: (list) => this.markers.setList(list),
      census: (counts) => this.census.setCounts(counts),
    });
    this.sheets = new Sheets(at('sheets'), this.state, neighbours);
    this.divider = new Divider(at('map'), this.state, neighbours);
    this.looks = new Looks();
    neighbours.look().then(() => this.stateChanged(new Set()));
    this.linking = new Linking(this);
    this.title = new Title(at('title'), this.state);
    const keys = make('button.word.act.keys', { type: 'button', click: () => this.showKeys() }, say('keys'));
    at('links').replaceChildren(this.tapeWord, this.linking.word, keys, ...this.looks.words);
    listen(this.hand, () => this.motion, {
      press: (x, y, touch) => this.tape.press(x, y, touch),
      tap: (x, y, touch) => this.tapped(x, y, touch),
      hover: (x, y) => this.hovered(x, y),
      begin: () => this.hand.classList.add('moving'),
      settled: () => this.hand.classList.remove('moving'),
    });
    this.hand.setAttribute('aria-label', say('map'));
    keyboard(this);
    folding(this.hand);
    new ResizeObserver(() => this.resized()).observe(at('map'));
    this.resized();
    this.linking.follow(false);
    this.stateChanged(new Set(['sheetName']));
  }

  // What is shown ------------------------------------------------------------------------------------------------

  /** @param {Set<string>} changed */
  stateChanged(changed) {
    if (!this.motion || !this.sheets) return;
    const { state } = this;
    this.map.show(this.layers.shown, state.divide, state.held);
    this.sheets.draw();
    this.divider.draw();
    if (['sides', 'held', 'atlas', 'epoch'].some((key) => changed.has(key))) this.sideChanged();
    this.askCounts(80);
    if (changed.has('object')) this.seekObject();
    this.tape.follow();
    if (changed.has('tape')) this.tapeNote.back = false;
    else if (changed.has('object') && state.object) this.tapeNote.back = true;
    this.tapeNote.show(state.tape);
    this.tone.draw();
    this.depth.draw();
    this.census.draw();
    this.scale.draw();
    this.askTiles(0);
    this.catalogue.ask(this.motion.view, 150);
    this.linking?.soon();
    this.wake();
  }

  /** Another epoch or atlas may be in hand, with other epochs and objects. */
  sideChanged() {
    this.title.draw();
    if (this.state.epoch.catalogue) return;
    this.markers.setList([]);
    this.census.setCounts(NONE);
  }

  moved() {
    this.askTiles(60);
    this.askCounts(120);
    this.catalogue.ask(this.motion.view, 300);
    this.linking?.soon();
    this.wake();
  }

  /** @param {import('./tiles.js').Tile} tile */
  tileArrived(tile) {
    this.map.arrived(tile);
    this.askCounts(80);
  }

  wake() {
    if (!this.frameAsked) this.frameAsked = requestAnimationFrame((now) => this.draw(now));
  }

  /** One frame. @param {number} now ms */
  draw(now) {
    this.frameAsked = 0;
    this.motion.step(now);
    const { view } = this.motion;
    const more = this.map.render(view, now);
    this.markers.draw(view, (context) => this.overMap(context, view));
    if (this.drawnView !== view) this.scale.draw();
    /** @type {View} */ this.drawnView = view;
    this.reading.update(view);
    const busy = more || this.motion.moving || this.map.recolouring || this.linking.pending || this.tiles.pending > 0;
    this.hand.setAttribute('aria-busy', String(busy));
    if (!busy && !this.timers.ahead && this.aheadFor !== view) {
      this.aheadFor = view;
      this.timers.ahead = window.setTimeout(() => this.map.ask(this.motion.view, true), 500);
    }
    // For whoever measures: when the first view was complete.
    if (!busy && this.map.front && !performance.getEntriesByName('first-view').length) performance.mark('first-view');
    if (more || this.motion.moving) this.wake();
  }

  /** What is drawn over the map, under the rings. @param {CanvasRenderingContext2D} context @param {View} view */
  overMap(context, view) {
    const { tape } = this;
    const { em } = this.size;
    this.grid.draw(context, view);
    this.rulers.draw(context, view, 0.86 * em, this.reading.cursor);
    tape.draw(context, view, 0.92 * em);
    this.tapeNote.tie(context, tape.path(view), this.map.canvas);
  }

  /** Asks for tiles now, or at most every so often while things move. @param {number} every ms */
  askTiles(every) {
    if (this.timers.tiles && every) return;
    clearTimeout(this.timers.tiles);
    const wait = Math.max(this.asked.tiles + every - performance.now(), 0);
    const ask = () => {
      clearTimeout(this.timers.ahead);
      this.timers.ahead = 0;
      this.aheadFor = null;
      this.timers.tiles = 0;
      this.asked.tiles = performance.now();
      this.map.ask(this.motion.view, false, this.depth.playing ? this.layers.through(this.depth.following) : []);
      this.wake();
    };
    if (wait <= 0) ask();
    else this.timers.tiles = window.setTimeout(ask, wait);
  }

  /** Counts the values in view, at most every so often. @param {number} every ms */
  askCounts(every) {
    if (this.timers.counts) return;
    this.timers.counts = window.setTimeout(async () => {
      const { front } = this.map;
      if (front) {
        const parts = this.map.parts(this.motion.view);
        const pixels = parts.reduce((sum, p) => sum + (p.x1 - p.x0) * (p.y1 - p.y0), 0);
        const stride = Math.max(Math.round(Math.sqrt(pixels / 4e5)), 1);
        const second = this.state.second && front.layer.mate;
        const { coding } = second || front.layer;
        const how = this.tone.binning(coding);
        const { counts } = await this.tiles.count(parts, { stride, ...how, part: second ? 1 : 0 });
        this.tone.setCounts(counts, how, coding);
      }
      this.timers.counts = 0;
    }, every);
  }

  measured() {
    const box = at('map').getBoundingClientRect();
    const ratio = devicePixelRatio;
    const [dw, dh] = [Math.max(Math.round(box.width * ratio), 16), Math.max(Math.round(box.height * ratio), 16)];
    // The size of words on the map is that of words beside it.
    return { w: dw / ratio, h: dh / ratio, dw, dh, ratio, em: parseFloat(getComputedStyle(document.body).fontSize) };
  }

  resized() {
    this.size = this.measured();
    const { w, h, dw, dh, ratio } = this.size;
    this.map.resize(dw, dh, ratio);
    this.markers.resize(dw, dh, ratio);
    for (const sheet of [this.map.canvas, this.markers.canvas, this.hand]) Object.assign(sheet.style, { width: `${w}px`, height: `${h}px` });
    const { view } = this.motion;
    this.motion.view = this.motion.limits.clamp(view.resized(w, h));
    this.divider?.draw();
    this.moved();
    this.draw(performance.now());
  }

  // Hands --------------------------------------------------------------------------------------------------------

  /** @param {number} x @param {number} y @param {boolean} touch */
  tapped(x, y, touch) {
    if (this.markers.tap(x, y)) return;
    if (this.tape.near(x, y, touch)) {
      this.tapeNote.back = false;
      this.tapeNote.show(this.state.tape);
    } else if (this.state.divided) this.state.hold(x < this.state.divide * this.motion.view.w ? 0 : 1);
    if (touch) {
      this.reading.hover(null, null);
      this.reading.place = this.motion.view.invert(x, y);
    }
    this.wake();
  }

  /** @param {number|null} x @param {number|null} y */
  hovered(x, y) {
    this.reading.hover(x, y);
    this.tape.hover(x, y);
    const grip = !this.tape.taken && x !== null && y !== null && this.tape.knotAt(x, y) >= 0;
    this.hand.classList.toggle('over', !this.tape.taken && (this.markers.hover(x, y) || grip));
    this.wake();
  }

  /** A smooth step of the keyboard. @param {number} dx CSS pixels @param {number} dy */
  glide(dx, dy) {
    const { motion } = this;
    if (motion.calm.matches) return motion.drag(dx, dy);
    motion.zoom = null;
    motion.flight = null;
    // A fling of this speed covers the step: its way is speed times time constant.
    motion.fling(motion.velocity[0] + dx / 300, motion.velocity[1] + dy / 300);
  }

  /** @param {import('./objects.js').Found} found */
  goTo(found) {
    const { motion, atlas } = this;
    const width = Math.max((found.size ?? 0) * 9, atlas.pixel * 60);
    motion.fly(motion.view.with({ u: found.u, v: found.v, width: Math.min(width, motion.view.width) }));
  }

  /** @param {boolean} [byKey] */
  takeTape(byKey = true) {
    this.tape.byKey = byKey && !this.tape.cursor;
    this.tape.take();
    this.hand.focus({ preventScroll: true });
  }

  /** @param {boolean} taken */
  tapeTaken(taken) {
    this.tapeWord.setAttribute('aria-pressed', String(taken));
    this.hand.classList.toggle('laying', taken);
  }

  putAway() {
    this.depth.stop();
    if (this.tape.taken) return this.tape.down();
    if (!this.keysShown && !this.state.object) this.tape.away();
    this.keysShown = false;
    this.state.set({ object: null });
    this.markers.describe();
    this.hand.focus({ preventScroll: true });
  }

  showKeys() {
    const note = at('note');
    this.keysShown = !this.keysShown;
    if (!this.keysShown) return this.markers.describe();
    this.markers.choose(null);
    this.tapeNote.back = true;
    this.tapeNote.show(this.state.tape);
    note.hidden = false;
    note.style.transform = 'translateY(12px)';
    note.replaceChildren(...keysNote(() => this.putAway()));
  }

  /** An object that the link names but that is not among the heaviest in view is looked for. */
  async seekObject() {
    const { object } = this.state;
    this.keysShown = false;
    if (this.markers.choose(object) || object === null || !this.state.epoch.catalogue) return;
    const found = await this.catalogue.find(this.motion.view.bounds, (o) => Markers.name(o) === object).catch(() => null);
    if (this.state.object !== object) return;
    if (found) this.markers.adopt(found);
    else this.status.say(say('trouble_object', { name: object }));
  }

  /** @param {string} text @param {string} name what it is */
  async copy(text, name) {
    if (!text) return;
    const done = await navigator.clipboard?.writeText(text).then(() => true, () => false);
    this.status.say(done ? say('copied', { name }) : text);
  }

  copyReading() {
    return this.copy(this.reading.text, say('reading'));
  }

  /** The atlas was built anew while it was looked at. */
  async reopen() {
    if (this.reopening) return;
    this.reopening = true;
    this.tiles.clear();
    try {
      await Atlas.open();
      sessionStorage.setItem('tilemap-rebuilt', '1');
      location.reload();
    } catch {
      setTimeout(() => ((this.reopening = false), this.reopen()), 2000);
    }
  }
}

/** @param {Status} status @param {number} delay */
async function start(status, delay = 500) {
  let atlas;
  try {
    atlas = await Atlas.open();
  } catch (error) {
    status.say(say('trouble_atlas', { reason: error instanceof Error ? error.message : String(error) }), { kind: 'start', stay: 0 });
    setTimeout(() => start(status, Math.min(delay * 2, 15000)), delay);
    return;
  }
  const neighbours = new Neighbours(atlas);
  const other = read(location.hash).view['beside.atlas'];
  if (other) await neighbours.open(other);
  new Frame(atlas, neighbours, status);
  status.clear('start');
  if (sessionStorage.getItem('tilemap-rebuilt')) status.say(say('trouble_rebuilt'));
  sessionStorage.removeItem('tilemap-rebuilt');
}

const status = new Status(at('status'));
status.say('', { kind: 'start', stay: 0 });
start(status);
