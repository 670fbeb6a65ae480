/** How numbers read on screen. Pure. A true minus sign, thin spaces in thousands. */

const MINUS = '\u2212';

/** @param {number} value @param {number} decimals */
export function fixed(value, decimals) {
    const text = Math.abs(value).toFixed(decimals);
    return value < 0 && Number(text) !== 0 ? MINUS + text : text;
}

/** @param {number} value a whole number, in thousands with commas */
export const whole = (value) => Math.round(value).toLocaleString('en-GB');

/** @param {number} days a star time */
export const time = (days) => fixed(days, 4);

/** @param {number} flux relative */
export const flux = (flux) => fixed(flux, 5);

/** @param {number} days a length, as hours */
export const hours = (days) => fixed(days * 24, 2);

/** @typedef {'%' | 'ppm'} DepthUnit */

/** @param {number} depth relative @param {DepthUnit} unit without the unit itself */
export const depth = (depth, unit) =>
    unit === '%' ? fixed(depth * 100, 4) : fixed(depth * 1e6, 0);

/** @param {string} text what a person typed @returns {number} NaN when it is no number */
export function typed(text) {
    const plain = text
        .trim()
        .replace(MINUS, '-')
        .replace(/[\s\u2009]/g, '')
        .replace(',', '.');
    return /^[-+]?(\d+\.?\d*|\.\d+)(e[-+]?\d+)?$/i.test(plain) ? Number(plain) : NaN;
}

/** @param {string} reference as the server gives it, for an axis: "BJD_TDB − 2457000, days" */
export const axis = (reference) =>
    `${(reference || 'time').replace(/\s*-\s*(?=\d)/, ` ${MINUS} `)}, days`;

/** @param {number} share 0…1 as whole percent */
export const percent = (share) => `${fixed(share * 100, 0)}\u00a0%`;

/**
 * Value ± error; an error as large as the value says only that there is no telling.
 * @param {number | null} value @param {number | null} error @param {number} decimals
 */
export function withError(value, error, decimals) {
    if (typeof value !== 'number') return '–';
    const text = fixed(value, decimals);
    if (typeof error !== 'number') return text;
    return error < Math.abs(value) ? `${text} ± ${fixed(error, decimals)}` : `${text} ± ?`;
}

/** @param {number} value a probability: never 0 or 1, which would claim too much */
export function probability(value) {
    if (value > 0.999) return '> 0.999';
    if (value < 0.001) return '< 0.001';
    return value.toFixed(3);
}

/** @param {number} count @param {string} one @param {string} [many] */
export const counted = (count, one, many = `${one}s`) =>
    `${whole(count)} ${count === 1 ? one : many}`;

/** @param {string} text RFC 3339 @returns {string} in the reader's own zone */
export function moment(text) {
    const when = new Date(text);
    if (Number.isNaN(when.getTime())) return text;
    return when.toLocaleString('en-GB', { dateStyle: 'medium', timeStyle: 'short' });
}

/** @param {string} text RFC 3339 */
export function day(text) {
    const when = new Date(text);
    return Number.isNaN(when.getTime())
        ? text
        : when.toLocaleDateString('en-GB', { dateStyle: 'medium' });
}
