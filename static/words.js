// Every word on screen, in one table. Another language is one more table with the same keys; `?lang=` or the browser
// decides. Values may hold {names} that say() fills in.

/** @type {Record<string, Record<string, any>>} */
const TABLES = {
  en: {
    untitled: 'Atlas',
    map: 'Map. Arrow keys travel, plus and minus zoom, 0 shows the whole volume, question mark lists all keys.',
    epochs: 'Epochs',
    epoch: 'z = {z}',
    age: '{age} Gyr',

    sheets: 'Sheets',
    sheet_key: 'key {n}',

    tone: 'Tone',
    tone_dark: 'Dark end',
    tone_bright: 'Bright end',
    tone_auto: 'auto',
    tone_auto_title: 'Set both ends from the values in view (a)',
    tone_reset: 'reset',
    tone_reset_title: 'The ends of the whole volume (shift a)',
    curve: 'Curve',
    curve_log: 'log',
    curve_linear: 'linear',
    curve_asinh: 'asinh',
    ramps: 'Colour ramp',

    depth: 'Depth',
    depth_near: 'Near end of the depth window',
    depth_far: 'Far end of the depth window',
    depth_slide: 'Depth window',
    depth_whole: 'whole depth',
    depth_whole_title: 'Open the window over all slabs (\\)',
    depth_reading: '{axis} {a} – {b} {unit}',
    depth_all: 'all {axis}',
    depth_share: '{share} % of it all',

    scale: 'Scale',
    scale_thumb: 'Width in view',
    scale_text: '{length} across',
    scale_whole: 'whole',
    scale_pixel: 'pixel',
    comoving: 'comoving',
    proper: 'proper',
    angle: 'angle',

    census: 'Census',
    census_low: 'Fewest: lower end of the brush on {column}',
    census_high: 'Upper end of the brush on {column}',
    census_count: '{n} in view',
    census_brushed: '{n} in view, {column} {a} to {b}',
    census_all: 'all objects',
    census_all_title: 'Take the brush away',
    census_none: 'no catalogue',

    reading_none: 'nothing here',
    reading_outside: 'outside the volume',
    reading_wait: '…',
    copied_value: 'Reading copied',

    object: 'Object {id}',
    object_close: 'close',
    object_go: 'go there',
    object_row: 'row {n}',

    link_copy: 'copy link',
    link_copied: 'link copied',
    link_shown: 'The link is in the address line',
    keys: 'keys',
    keys_close: 'close',
    key_list: [
      ['arrows', 'travel; with shift, further'],
      ['+ −', 'closer, wider'],
      ['0', 'the whole volume'],
      ['1 … 9', 'choose a sheet'],
      ['a', 'tone from what is in view'],
      ['shift a', 'tone of the whole volume'],
      ['l', 'next curve'],
      ['r', 'next colour ramp'],
      ['[ ]', 'slide the depth window'],
      ['{ }', 'close, open the depth window'],
      ['\\', 'whole depth'],
      ['n p', 'next, previous object, heaviest first'],
      ['g', 'go to the chosen object'],
      ['m', 'markers on or off'],
      ['u', 'comoving, proper, angle'],
      ['c', 'copy the reading'],
      ['k', 'copy the link'],
      ['?', 'this list'],
      ['esc', 'put away'],
    ],

    trouble_server: 'The server does not answer. Asking again.',
    trouble_back: 'The server answers again.',
    trouble_damaged: 'A tile is damaged; a coarser one stands in.',
    trouble_missing: 'A tile is missing; a coarser one stands in.',
    trouble_rebuilt: 'The atlas was built anew; it has been read again.',
    trouble_sheet: 'The link asks for a sheet “{name}” that this atlas does not have.',
    trouble_epoch: 'The link asks for an epoch “{name}” that this atlas does not have.',
    trouble_ramp: 'The link asks for a colour ramp “{name}” that is not known.',
    trouble_object: 'The link asks for an object “{name}” that is not in view.',
    trouble_link: 'The link could not be read at “{part}”.',
    trouble_atlas: 'The atlas cannot be read: {reason}',
  },
};

function choose() {
  const asked = new URLSearchParams(location.search).get('lang');
  for (const tag of [asked, ...(navigator.languages ?? [])]) {
    const short = tag?.slice(0, 2).toLowerCase();
    if (short && short in TABLES) return short;
  }
  return 'en';
}

const language = typeof location === 'undefined' ? 'en' : choose();
const table = TABLES[language];

/** The number format that goes with the words. */
export const LOCALE = language;

/**
 * @param {string} key
 * @param {Record<string, string|number>} [fill]
 * @returns {string}
 */
export function say(key, fill = {}) {
  /** @type {string|undefined} */ const text = table[key];
  if (text === undefined) throw new RangeError(`words: no entry ${key}`);
  return text.replace(/\{(\w+)\}/g, (/** @type {string} */ whole, /** @type {string} */ name) => (name in fill ? String(fill[name]) : whole));
}

/** The keys and what they do. @returns {[string, string][]} */
export const keyList = () => /** @type {[string, string][]} */ (table.key_list);
