// What is kept on this machine from one visit to the next, such as the language. A browser may refuse to keep anything.

/** @param {string} name @returns {string|null} */
export function recall(name) {
  try {
    return localStorage.getItem(`tilemap-${name}`);
  } catch {
    return null;
  }
}

/** @param {string} name @param {string} value */
export function keep(name, value) {
  try {
    localStorage.setItem(`tilemap-${name}`, value);
  } catch {
    // Then it holds for this page only.
  }
}
