// Every word on screen, in one table: each entry once in every language of LANGUAGES, in that order. A new word is one new
// entry; a new language one more column. The address (`?lang=de`), what was chosen here before, or the browser decides.
// Texts may hold {names} that say() fills in.

import { keep, recall } from './kept.js';

/** @typedef {keyof typeof WORDS} Word */
/** @typedef {[en: string, de: string]} Told */

export const LANGUAGES = ['en', 'de'];

const WORDS = /** @satisfies {Record<string, Told>} */ ({
  language: ['English', 'Deutsch'],
  language_title: ['The frame in English', 'Der Rahmen auf Deutsch'],
  light: ['light room', 'heller Raum'],
  light_title: ['Light around the map (d)', 'Die Umgebung der Karte hell (d)'],
  dark: ['dark room', 'dunkler Raum'],
  dark_title: ['Dark around the map (d)', 'Die Umgebung der Karte dunkel (d)'],

  untitled: ['Atlas', 'Atlas'],
  map: [
    'Map. Arrow keys travel, plus and minus zoom, 0 shows the whole volume, question mark lists all keys.',
    'Karte. Pfeiltasten reisen, Plus und Minus ändern die Weite, 0 zeigt das ganze Volumen, Fragezeichen nennt alle Tasten.',
  ],
  epochs: ['Epochs', 'Epochen'],
  epoch: ['z = {z}', 'z = {z}'],
  age: ['{age} Gyr', '{age} Mrd. Jahre'],
  times: [' × ', ' · '],

  sheets: ['Sheets', 'Blätter'],
  sheet_key: ['key {n}', 'Taste {n}'],
  how: ['How it is shown', 'Wie es gezeigt wird'],
  how_alone: ['alone', 'allein'],
  how_hue: ['in the hue of', 'im Farbton von'],
  how_above: ['beneath', 'unter'],
  mate: ['Second sheet', 'Zweites Blatt'],
  divide: ['divide', 'teilen'],
  divide_end: ['undivide', 'nicht teilen'],
  divide_title: ['Put another sheet, epoch or atlas beside it (v)', 'Ein anderes Blatt, eine andere Epoche, einen anderen Atlas daneben (v)'],
  beside_atlas: ['Atlas on the right', 'Atlas auf der rechten Seite'],
  of_atlas: ['of {title}', 'aus {title}'],
  divider: ['Divider', 'Trennlinie'],
  divider_text: [
    '{share} % of the width: {left} on the left, {right} on the right',
    '{share} % der Breite: links {left}, rechts {right}',
  ],
  side_in_hand: ['Side in hand', 'Seite in der Hand'],

  tone: ['Tone', 'Tonwerte'],
  tone_of: ['Tone of', 'Tonwerte von'],
  tone_across: ['{lo} → {hi} {unit}', '{lo} → {hi} {unit}'],
  tone_low: ['Low end', 'Unteres Ende'],
  tone_high: ['High end', 'Oberes Ende'],
  tone_dark: ['Dark end', 'Dunkles Ende'],
  tone_bright: ['Bright end', 'Helles Ende'],
  tone_auto: ['auto', 'von selbst'],
  tone_auto_title: ['Set both ends from the values in view (a)', 'Beide Enden aus den sichtbaren Werten (a)'],
  tone_reset: ['reset', 'zurück'],
  tone_reset_title: ['The ends of the whole volume (shift a)', 'Die Enden des ganzen Volumens (Umschalt a)'],
  curve: ['Curve', 'Kurve'],
  curve_log: ['log', 'log'],
  curve_linear: ['linear', 'linear'],
  curve_asinh: ['asinh', 'arsinh'],
  ramps: ['Colour ramp', 'Farbverlauf'],
  ramp_strandline: ['strandline', 'Spülsaum'],
  ramp_kelpfire: ['kelpfire', 'Tangfeuer'],
  ramp_starwort: ['starwort', 'Sternmiere'],
  ramp_undertow: ['undertow', 'Sogstrom'],
  ramp_lichen: ['lichen', 'Flechte'],
  ramp_heather: ['heather', 'Heide'],
  ramp_shingle: ['shingle', 'Kiesel'],
  hues_dusk: ['dusk', 'Dämmerung'],
  hues_estuary: ['estuary', 'Mündung'],

  depth: ['Depth', 'Tiefe'],
  depth_near: ['Near end of the depth window', 'Nahes Ende des Tiefenfensters'],
  depth_far: ['Far end of the depth window', 'Fernes Ende des Tiefenfensters'],
  depth_slide: ['Depth window', 'Tiefenfenster'],
  depth_whole: ['whole', 'alles'],
  depth_play: ['play', 'abspielen'],
  depth_stop: ['stop', 'anhalten'],
  depth_play_title: ['Slide the window through the depth (w)', 'Das Fenster durch die Tiefe schieben (w)'],
  depth_whole_title: ['Open the window over all slabs (\\)', 'Das Fenster über alle Scheiben öffnen (\\)'],
  depth_reading: ['{axis} {a} – {b} {unit}', '{axis} {a} – {b} {unit}'],
  depth_share: ['{share} % of it all', '{share} % von allem'],

  scale: ['Scale', 'Maßstab'],
  scale_thumb: ['Width in view', 'Sichtbare Weite'],
  scale_text: ['{length} across', '{length} breit'],
  scale_whole: ['whole', 'alles'],
  scale_pixel: ['pixel', 'Pixel'],
  comoving: ['comoving', 'mitbewegt'],
  proper: ['proper', 'eigentlich'],
  angle: ['angle', 'Winkel'],

  census: ['Census', 'Zählung'],
  census_low: ['Lower end of the brush on {column}', 'Unteres Ende der Auswahl nach {column}'],
  census_high: ['Upper end of the brush on {column}', 'Oberes Ende der Auswahl nach {column}'],
  census_count: ['{n} in view', '{n} in Sicht'],
  census_all: ['all objects', 'alle Objekte'],
  census_all_title: ['Take the brush away', 'Die Auswahl aufheben'],
  census_none: ['no catalogue', 'kein Katalog'],

  reading_none: ['nothing here', 'hier ist nichts'],
  reading_outside: ['outside the volume', 'außerhalb des Volumens'],
  reading_wait: ['…', '…'],
  reading_copy: ['{value} at {where} ({sheet}, level {level})', '{value} bei {where} ({sheet}, Stufe {level})'],
  reading: ['reading', 'Wert'],
  reading_title: ['Copy the reading (c)', 'Den Wert kopieren (c)'],
  copied: ['Copied: {name}', 'Kopiert: {name}'],

  tape: ['Tape', 'Band'],
  tape_take: ['tape', 'Band'],
  tape_take_title: ['Measure a length, or what is inside an outline (t)', 'Eine Länge messen, oder was in einem Umriss liegt (t)'],
  tape_hint: [
    'Tap to put knots, or draw. The last knot again ends the line, the first closes an outline.',
    'Knoten tippen oder frei zeichnen. Nochmals der letzte Knoten beendet die Linie, der erste schließt einen Umriss.',
  ],
  tape_length: ['length', 'Länge'],
  tape_ends: ['end to end', 'von Ende zu Ende'],
  tape_area: ['area', 'Fläche'],
  tape_around: ['around', 'Umfang'],
  tape_mean: ['mean', 'Mittel'],
  tape_spread: ['spread', 'Streuung'],
  tape_total: ['total', 'Summe'],
  tape_together: ['together', 'zusammen'],
  tape_common: ['about the common mean of all inside', 'um das gemeinsame Mittel von allem darin'],
  tape_highest: ['the highest inside', 'der höchste Wert darin'],
  tape_by_area: ['over area', 'über die Fläche'],
  tape_weighted: ['weighted by {weight}', 'gewichtet mit {weight}'],
  tape_deviation: ['standard deviation of its pixels', 'Standardabweichung der Pixel'],
  tape_fine: ['From every pixel of the file.', 'Aus jedem Pixel der Datei.'],
  tape_coarse: ['From coarser pixels of {size}: level {level}.', 'Aus gröberen Pixeln von {size}: Stufe {level}.'],
  tape_outside: [
    '{share} % of it lies outside the volume and does not count.',
    '{share} % davon liegen außerhalb des Volumens und zählen nicht.',
  ],
  tape_refused: ['There is nothing inside this outline.', 'In diesem Umriss liegt nichts.'],
  tape_without: ['This server knows no numbers of outlines.', 'Dieser Server kennt keine Zahlen zu Umrissen.'],
  tape_damaged: [
    'The numbers inside cannot be read: the atlas is damaged there.',
    'Die Zahlen darin sind nicht zu lesen: der Atlas ist dort beschädigt.',
  ],
  tape_copy: ['Copy with its unit', 'Mit der Einheit kopieren'],
  tape_copy_all: ['copy all', 'alles kopieren'],
  tape_away: ['put away', 'weglegen'],

  object: ['Object {id}', 'Objekt {id}'],
  object_close: ['close', 'schließen'],
  object_go: ['go there', 'hingehen'],

  link_copy: ['copy link', 'Link kopieren'],
  link_copied: ['link copied', 'Link kopiert'],
  link_shown: ['The link is in the address line', 'Der Link steht in der Adresszeile'],
  keys: ['keys', 'Tasten'],
  keys_close: ['close', 'schließen'],
  key_arrows: ['arrows', 'Pfeile'],
  key_shift: ['shift', 'Umschalt'],
  key_esc: ['esc', 'Esc'],
  key_enter: ['enter', 'Eingabe'],
  key_backspace: ['backspace', 'Rücktaste'],

  trouble_server: ['The server does not answer. Asking again.', 'Der Server antwortet nicht. Wird wieder gefragt.'],
  trouble_back: ['The server answers again.', 'Der Server antwortet wieder.'],
  trouble_damaged: ['A tile is damaged; a coarser one stands in.', 'Eine Kachel ist beschädigt; eine gröbere vertritt sie.'],
  trouble_missing: ['A tile is missing; a coarser one stands in.', 'Eine Kachel fehlt; eine gröbere vertritt sie.'],
  trouble_rebuilt: ['The atlas was built anew; it has been read again.', 'Der Atlas wurde neu gebaut und neu gelesen.'],
  trouble_sheet: [
    'The link asks for a sheet “{name}” that this atlas does not have.',
    'Der Link verlangt ein Blatt „{name}“, das dieser Atlas nicht hat.',
  ],
  trouble_epoch: [
    'The link asks for an epoch “{name}” that this atlas does not have.',
    'Der Link verlangt eine Epoche „{name}“, die dieser Atlas nicht hat.',
  ],
  trouble_beside: [
    'The link asks for an atlas “{name}” that this server does not have.',
    'Der Link verlangt einen Atlas „{name}“, den dieser Server nicht hat.',
  ],
  trouble_ramp: [
    'The link asks for a colour ramp “{name}” that is not known.',
    'Der Link verlangt einen Farbverlauf „{name}“, den es nicht gibt.',
  ],
  trouble_object: [
    'The link asks for an object “{name}” that is not in view.',
    'Der Link verlangt ein Objekt „{name}“, das nicht in Sicht ist.',
  ],
  trouble_link: ['The link could not be read at “{part}”.', 'Der Link war bei „{part}“ nicht zu lesen.'],
  trouble_atlas: ['The atlas cannot be read: {reason}', 'Der Atlas ist nicht zu lesen: {reason}'],
});

/** Keys and what they do. @type {[keys: string, told: Told][]} */
const KEYS = [
  ['arrows', ['travel; with shift, further', 'reisen; mit Umschalt weiter']],
  ['+ −', ['closer, wider', 'näher, weiter']],
  ['0', ['the whole volume', 'das ganze Volumen']],
  ['1 … 9', ['choose a sheet', 'ein Blatt wählen']],
  ['b', ['alone, in the hue of another sheet, beneath it', 'allein, im Farbton eines anderen Blattes, darunter']],
  ['o', ['tone of the one or the other', 'Tonwerte des einen oder des anderen']],
  ['v', ['divide the map, or put it together', 'die Karte teilen oder zusammenfügen']],
  ['s', ['take the other side in hand', 'die andere Seite in die Hand nehmen']],
  ['e', ['next epoch', 'nächste Epoche']],
  ['shift e', ['the epoch before', 'vorige Epoche']],
  ['a', ['tone from what is in view', 'Tonwerte aus dem, was zu sehen ist']],
  ['shift a', ['tone of the whole volume', 'Tonwerte des ganzen Volumens']],
  ['l', ['next curve', 'nächste Kurve']],
  ['r', ['next colour ramp', 'nächster Farbverlauf']],
  ['[ ]', ['slide the depth window', 'das Tiefenfenster schieben']],
  ['{ }', ['close, open the depth window', 'das Tiefenfenster schließen, öffnen']],
  ['w', ['play the depth window, or stop it', 'das Tiefenfenster abspielen oder anhalten']],
  ['\\', ['whole depth', 'ganze Tiefe']],
  ['n p', ['next, previous object, heaviest first', 'nächstes, voriges Objekt, das schwerste zuerst']],
  ['g', ['go to the chosen object', 'zum gewählten Objekt']],
  ['m', ['markers on or off', 'Ringe an oder aus']],
  ['u', ['comoving, proper, angle', 'mitbewegt, eigentlich, Winkel']],
  ['t', ['take the tape in hand, lay it down', 'das Band zur Hand nehmen, hinlegen']],
  ['enter', ['put a knot', 'einen Knoten setzen']],
  ['backspace', ['take the last knot back', 'den letzten Knoten zurücknehmen']],
  ['y', ['copy what the tape measures', 'kopieren, was das Band misst']],
  ['c', ['copy the reading', 'den Wert kopieren']],
  ['k', ['copy the link', 'den Link kopieren']],
  ['d', ['dark or light around the map', 'Umgebung der Karte dunkel oder hell']],
  ['?', ['this list', 'diese Liste']],
  ['esc', ['put away', 'weglegen']],
];

function wanted() {
  const asked = new URLSearchParams(location.search).get('lang');
  for (const tag of [asked, recall('language'), ...navigator.languages]) {
    const short = tag?.slice(0, 2).toLowerCase();
    if (short && LANGUAGES.includes(short)) return short;
  }
  return LANGUAGES[0];
}

/** The language of the words, and of the number format that goes with them. */
export const LOCALE = wanted();
const column = LANGUAGES.indexOf(LOCALE);

/** Says everything in another language from now on. The link says what is shown, so the page just begins again. @param {string} language */
export function speak(language) {
  keep('language', language);
  const address = new URL(location.href);
  address.searchParams.delete('lang');
  if (address.href === location.href) location.reload();
  else location.replace(address);
}

/** The other languages: how each names itself. @returns {{language: string, name: string, title: string}[]} */
export const others = () =>
  LANGUAGES.map((language, i) => ({ language, name: WORDS.language[i], title: WORDS.language_title[i] })).filter((_, i) => i !== column);

/**
 * @param {Word} key
 * @param {Record<string, string|number>} [fill]
 * @returns {string}
 */
export function say(key, fill = {}) {
  const told = WORDS[key];
  if (!told) throw new RangeError(`words: no entry ${key}`);
  return told[column].replace(/\{(\w+)\}/g, (whole, name) => (name in fill ? String(fill[name]) : whole));
}

/** The keys and what they do. @returns {[string, string][]} */
export const keyList = () =>
  KEYS.map(([keys, told]) => [
    keys.replace(/arrows|shift|esc|enter|backspace/, (name) => say(/** @type {Word} */ (`key_${name}`))),
    told[column],
  ]);
