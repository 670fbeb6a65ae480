/** A canvas as sharp as its screen, and the inks of the page to draw on it with. */

/**
 * @typedef {object} Paper
 * @property {CanvasRenderingContext2D} pen scaled so that 1 is a CSS pixel
 * @property {number} width @property {number} height CSS pixels
 * @property {number} scale device pixels to a CSS pixel
 */
/**
 * @typedef {object} Inks
 * @property {string} ink points and figures @property {string} faint thin rules
 * @property {string} soft the dense parts of a chart, lighter @property {string} band every other
 * day
 * @property {string} own the reader's marks @property {string} consensus
 * @property {string} ground the paper @property {string} font figures @property {boolean} forced
 * @property {number} unit what the page's text is larger by than 16 px
 */

const SCALE_MOST = 3;

/**
 * The canvas made ready for a new picture of the given size, empty.
 * @param {HTMLCanvasElement} canvas @param {number} width @param {number} height CSS pixels
 * @returns {Paper | null} null when there is nothing to draw on
 */
export function paperOf(canvas, width, height) {
    const pen = canvas.getContext('2d');
    if (pen === null || width < 1 || height < 1) return null;
    const scale = Math.min(Math.max(devicePixelRatio || 1, 1), SCALE_MOST);
    const [across, down] = [Math.round(width * scale), Math.round(height * scale)];
    if (canvas.width !== across || canvas.height !== down) {
        canvas.width = across;
        canvas.height = down;
    }
    pen.setTransform(scale, 0, 0, scale, 0, 0);
    pen.clearRect(0, 0, width, height);
    return { pen, width, height, scale };
}

/** The size of the page's text over 16 px, which the charts' figures follow. */
export const unitNow = () =>
    parseFloat(getComputedStyle(document.documentElement).fontSize) / 16 || 1;

/** The inks in force now, from the page's custom properties. @returns {Inks} */
export function inksNow() {
    const style = getComputedStyle(document.documentElement);
    /** @param {string} name */
    const ink = (name) => style.getPropertyValue(`--${name}`).trim();
    return {
        ink: ink('ink'),
        faint: ink('rule'),
        soft: ink('ink-soft'),
        band: ink('band'),
        own: ink('own'),
        consensus: ink('consensus'),
        ground: ink('ground'),
        font: ink('figures'),
        forced: matchMedia('(forced-colors: active)').matches,
        unit: unitNow(),
    };
}

/** Calls back whenever the inks may have changed. @param {() => void} changed */
export function watchInks(changed) {
    for (const query of ['(prefers-color-scheme: dark)', '(forced-colors: active)', 'print'])
        matchMedia(query).addEventListener('change', changed);
}

/** @typedef {{left: number, top: number, width: number, height: number}} Rect */

/**
 * Fills a rectangle with slanted rules.
 * @param {CanvasRenderingContext2D} pen @param {Rect} rect
 * @param {number} apart CSS pixels @param {1 | -1} slant 1: rising to the right
 */
export function hatch(pen, rect, apart, slant) {
    const right = rect.left + rect.width;
    const bottom = rect.top + rect.height;
    pen.save();
    pen.beginPath();
    pen.rect(rect.left, rect.top, rect.width, rect.height);
    pen.clip();
    pen.beginPath();
    const first = Math.floor((rect.left - rect.height) / apart) * apart;
    for (let x = first; x < right + rect.height; x += apart) {
        pen.moveTo(x, slant > 0 ? bottom : rect.top);
        pen.lineTo(x + rect.height, slant > 0 ? rect.top : bottom);
    }
    pen.stroke();
    pen.restore();
}
