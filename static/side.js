// What one side of the map shows, or all of it: an atlas, an epoch of it, one sheet, or two and how they go together. A small
// value; choosing makes a new one in which everything fits together.

/** @typedef {import('./atlas.js').Atlas} Atlas */
/** @typedef {import('./atlas.js').Epoch} Epoch */
/** @typedef {import('./atlas.js').Sheet} Sheet */
/** @typedef {import('./atlas.js').How} How */
/** @typedef {{atlas: Atlas, epoch: Epoch, sheetName: string, how: How, mateName: string}} Side */

/** @type {How[]} */
export const HOWS = ['', 'hue', 'above'];

/** @param {Side} side @returns {Sheet} */
export const sheetOf = ({ atlas, epoch, sheetName }) => atlas.sheet(epoch, sheetName) ?? epoch.sheets[0];

/** The second sheet, where there is one. @param {Side} side */
export const mateOf = ({ atlas, epoch, how, mateName }) => (how ? atlas.sheet(epoch, mateName) : undefined);

/** The epoch of an atlas that is most like another: of the same name, or at the nearest redshift. @param {Atlas} atlas @param {Epoch} epoch */
export function epochLike(atlas, epoch) {
  const away = (/** @type {Epoch} */ e) => (e.name === epoch.name ? -1 : Math.abs((e.redshift ?? 0) - (epoch.redshift ?? 0)));
  return atlas.epochs.reduce((best, e) => (away(e) < away(best) ? e : best));
}

/** A second sheet to begin with: a mean has a hue to give, stars shine. @param {Sheet[]} sheets @param {string} first @param {How} how */
function mateFor(sheets, first, how) {
  const others = sheets.filter((s) => s.name !== first);
  const shines = (/** @type {Sheet} */ s) => /star|stellar/i.test(`${s.name} ${s.title}`);
  return others.find((s) => (how === 'hue' ? s.weight !== null && s.kind !== 'dispersion' : shines(s))) ?? others[0];
}

/**
 * The side after a choice. Another atlas brings its own like epoch; a sheet that the epoch does not have gives way to its
 * first; a sheet chosen first that was the second changes places with it.
 * @param {Side} side @param {Partial<Side>} patch @returns {Side}
 */
export function chosen(side, patch) {
  const next = { ...side, ...patch };
  if (patch.atlas && patch.atlas !== side.atlas && !patch.epoch) next.epoch = epochLike(next.atlas, side.epoch);
  const { sheets } = next.epoch;
  next.sheetName = sheetOf(next).name;
  if (!next.how) return next;
  if (next.mateName === next.sheetName) next.mateName = patch.mateName ? '' : side.sheetName;
  const fits = next.mateName !== next.sheetName && sheets.some((s) => s.name === next.mateName);
  if (!fits || (patch.how && patch.how !== side.how && !patch.mateName)) {
    const mate = mateFor(sheets, next.sheetName, next.how);
    if (mate) next.mateName = mate.name;
    else next.how = '';
  }
  return next;
}
