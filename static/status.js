// One quiet line for what goes wrong and for what was done. In: a message, and how long it stays. Out: text.

export class Status {
  /** @param {HTMLElement} root */
  constructor(root) {
    this.root = root;
    this.timer = 0;
    this.kind = '';
  }

  /** @param {string} text @param {{kind?: string, stay?: number}} [how] stay in ms; 0 until it is cleared */
  say(text, { kind = 'note', stay = 5000 } = {}) {
    clearTimeout(this.timer);
    this.kind = kind;
    this.root.textContent = text;
    this.root.classList.add('shown');
    if (stay) this.timer = window.setTimeout(() => this.clear(kind), stay);
  }

  /** @param {string} kind */
  clear(kind) {
    if (this.kind !== kind) return;
    this.kind = '';
    this.root.classList.remove('shown');
    this.root.textContent = '';
  }
}
