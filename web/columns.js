/**
 * Thins a light curve for drawing: for each column of the paper its lowest and highest flux, so
 * that
 * no dip and no spike is lost however many points fall on a pixel, and the band that most of its
 * points lie in. Pure.
 */
import { firstAt } from './geometry.js';

/**
 * @typedef {object} Columns
 * @property {number} count
 * @property {Float64Array} low @property {Float64Array} high lowest and highest flux; NaN: no point
 * @property {Float64Array} mean @property {Float64Array} spread mean and standard deviation
 * @property {Uint32Array} points how many fell on each column
 */

/**
 * @param {ArrayLike<number>} times increasing @param {ArrayLike<number>} flux
 * @param {import('./geometry.js').Span} span @param {number} count columns
 * @returns {Columns}
 */
export function columnsOf(times, flux, span, count) {
    const low = new Float64Array(count).fill(NaN);
    const high = new Float64Array(count).fill(NaN);
    const mean = new Float64Array(count);
    const spread = new Float64Array(count);
    const points = new Uint32Array(count);
    const perDay = count / (span.t1 - span.t0);
    for (let at = firstAt(times, span.t0); at < times.length && times[at] <= span.t1; at++) {
        const column = Math.min(Math.floor((times[at] - span.t0) * perDay), count - 1);
        const value = flux[at];
        if (!(value >= low[column])) low[column] = value;
        if (!(value <= high[column])) high[column] = value;
        points[column]++;
        const off = value - mean[column];
        mean[column] += off / points[column];
        spread[column] += off * (value - mean[column]);
    }
    for (let column = 0; column < count; column++)
        spread[column] = points[column] > 1 ? Math.sqrt(spread[column] / points[column]) : 0;
    return { count, low, high, mean, spread, points };
}
