/** Small helpers for the page itself. Texts only ever go in as text, never as markup. */

/**
 * @typedef {Record<string, string | number | boolean | ((event: any) => void) | null | undefined>}
 * Props
 */

/**
 * An element with attributes (true: present, false or null: absent), listeners (onclick: …) and
 * children.
 * @template {keyof HTMLElementTagNameMap} K
 * @param {K} tag @param {Props} [props] @param {(Node | string)[]} children
 * @returns {HTMLElementTagNameMap[K]}
 */
export function el(tag, props = {}, ...children) {
    const element = document.createElement(tag);
    for (const [name, value] of Object.entries(props)) {
        if (typeof value === 'function') element.addEventListener(name.slice(2), value);
        else if (value === true) element.setAttribute(name, '');
        else if (value !== false && value !== null && value !== undefined)
            element.setAttribute(name, String(value));
    }
    element.append(...children);
    return element;
}

/**
 * The one element with data-part="name"; pages carry these instead of ids.
 * @template {HTMLElement} [T=HTMLElement]
 * @param {string} name @param {ParentNode} [root]
 * @returns {T}
 */
export function part(name, root = document) {
    const found = root.querySelector(`[data-part="${name}"]`);
    if (found === null) throw new Error(`The page has no part named ${name}.`);
    return /** @type {T} */ (found);
}

/** @param {HTMLElement} element @param {boolean} shown */
export function show(element, shown) {
    element.hidden = !shown;
}

/** @param {HTMLElement} element @param {string} text */
export function say(element, text) {
    if (element.textContent !== text) element.textContent = text;
}

/** The sentence of whatever was thrown. @param {unknown} error */
export const sentence = (error) => (error instanceof Error ? error.message : String(error));

/**
 * Runs a button's work with the button out of use meanwhile; what fails is said in `note`.
 * @param {HTMLButtonElement} button @param {HTMLElement} note @param {() => Promise<void>} work
 */
export async function atWork(button, note, work) {
    if (button.getAttribute('aria-disabled') === 'true') return;
    button.setAttribute('aria-disabled', 'true');
    say(note, '');
    try {
        await work();
    } catch (error) {
        say(note, sentence(error));
    } finally {
        button.removeAttribute('aria-disabled');
    }
}
