/** The few choices that a browser remembers by itself; they never leave it. */

/** @type {Map<string, string>} for browsers that refuse to remember */
const here = new Map();

/** @param {string} name @param {string} standard */
export function preference(name, standard) {
    try {
        return localStorage.getItem(`ebbmark.${name}`) ?? here.get(name) ?? standard;
    } catch {
        return here.get(name) ?? standard;
    }
}

/** @param {string} name @param {string} value */
export function setPreference(name, value) {
    here.set(name, value);
    try {
        localStorage.setItem(`ebbmark.${name}`, value);
    } catch {
        return;
    }
}
