// Two small helpers to make elements.

/**
 * @param {string} name tag, with classes after dots: "button.word"
 * @param {Record<string, string|number|boolean|((event: any) => void)|null|undefined>} [attributes] functions become listeners
 * @param {...(Node|string)} children
 * @returns {HTMLElement}
 */
export function make(name, attributes = {}, ...children) {
  const [tag, ...classes] = name.split('.');
  const element = document.createElement(tag);
  if (classes.length) element.className = classes.join(' ');
  dress(element, attributes);
  element.append(...children);
  return element;
}

/** @param {string} tag @param {Record<string, string|number>} [attributes] @param {...(Node|string)} children */
export function svg(tag, attributes = {}, ...children) {
  const element = document.createElementNS('http://www.w3.org/2000/svg', tag);
  dress(element, attributes);
  element.append(...children);
  return element;
}

/** @param {Element} element @param {Record<string, any>} attributes */
export function dress(element, attributes) {
  for (const [key, value] of Object.entries(attributes)) {
    if (typeof value === 'function') element.addEventListener(key, value);
    else if (value === false || value === null || value === undefined) element.removeAttribute(key);
    else element.setAttribute(key, value === true ? '' : String(value));
  }
  return element;
}

/**
 * A row of words of which one is chosen: a radio group that arrow keys walk through.
 * @param {string} label @param {(value: string) => void} choose
 */
export function words(label, choose) {
  const root = make('div.words', { role: 'radiogroup', 'aria-label': label });
  root.addEventListener('keydown', (event) => {
    const step = { ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1 }[event.key];
    if (!step) return;
    const all = /** @type {HTMLElement[]} */ ([...root.children]);
    const next = all[(all.indexOf(/** @type {HTMLElement} */ (document.activeElement)) + step + all.length) % all.length];
    next.focus();
    next.click();
    event.preventDefault();
    event.stopPropagation();
  });
  let shown = '';
  return {
    root,
    /** @param {{value: string, text: string, title?: string, mark?: string}[]} list @param {string} chosen */
    update(list, chosen) {
      const key = JSON.stringify(list);
      if (key !== shown) {
        shown = key;
        root.replaceChildren(
          ...list.map(({ value, text, title, mark }) => {
            const word = make('button.word', { type: 'button', role: 'radio', 'data-value': value, title, click: () => choose(value) }, text);
            if (mark) word.style.setProperty('--mark', mark);
            return word;
          }),
        );
      }
      for (const word of root.children) {
        const on = word.getAttribute('data-value') === chosen;
        dress(word, { 'aria-checked': on ? 'true' : 'false', tabindex: on ? 0 : -1 });
      }
    },
  };
}

/**
 * A word that opens to a list of others, one of which takes its place.
 * @param {string} label @param {(value: string) => void} choose
 */
export function pick(label, choose) {
  const root = /** @type {HTMLSelectElement} */ (make('select.word.pick', { 'aria-label': label, change: () => choose(root.value) }));
  let shown = '';
  return {
    root,
    /** @param {{value: string, text: string}[]} list @param {string} chosen */
    update(list, chosen) {
      const key = JSON.stringify(list);
      if (key !== shown) root.replaceChildren(...list.map(({ value, text }) => make('option', { value }, text)));
      shown = key;
      root.value = chosen;
    },
  };
}
