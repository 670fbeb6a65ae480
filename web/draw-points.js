/** Draws a light curve's points, thinned to columns where they are dense. */
import { columnsOf } from './columns.js';
import { firstAt, fluxToY, timeToX } from './geometry.js';

/** @typedef {import('./geometry.js').View} View */
/** @typedef {import('./geometry.js').Plot} Plot */

const DOTS_TO_A_PIXEL = 2.5;

/**
 * @param {import('./paper.js').Paper} paper @param {import('./paper.js').Inks} inks
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>}} curve
 * @param {View} view @param {Plot} plot
 * @param {{dot?: number}} [options] size of a single point, CSS pixels
 */
export function drawPoints(paper, inks, curve, view, plot, { dot = 0 } = {}) {
    const { pen } = paper;
    const from = firstAt(curve.times, view.t0);
    const to = firstAt(curve.times, view.t1);
    pen.save();
    pen.beginPath();
    pen.rect(plot.left, plot.top, plot.width, plot.height);
    pen.clip();
    if (to - from > plot.width * DOTS_TO_A_PIXEL) drawColumns(paper, inks, curve, view, plot);
    else drawDots(pen, inks, curve, view, plot, dot, [from, Math.min(to, curve.times.length - 1)]);
    pen.restore();
}

/**
 * Every point by itself, larger the fewer there are.
 * @param {CanvasRenderingContext2D} pen @param {import('./paper.js').Inks} inks
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>}} curve
 * @param {View} view @param {Plot} plot @param {number} dot 0: as fits
 * @param {[number, number]} range first and last index
 */
function drawDots(pen, inks, curve, view, plot, dot, [from, to]) {
    const apart = plot.width / Math.max(to - from, 1);
    const size = dot || Math.min(4.5, Math.max(2, 1.3 + 1.2 * apart)) * inks.unit;
    pen.fillStyle = inks.ink;
    pen.beginPath();
    for (let at = from; at <= to; at++) {
        const x = timeToX(view, plot, curve.times[at]);
        const y = fluxToY(view, plot, curve.flux[at]);
        if (size < 2.5) pen.rect(x - size / 2, y - size / 2, size, size);
        else {
            pen.moveTo(x + size / 2, y);
            pen.arc(x, y, size / 2, 0, 2 * Math.PI);
        }
    }
    pen.fill();
}

/**
 * Lowest to highest in a soft ink, where most of them lie in full ink.
 * @param {import('./paper.js').Paper} paper @param {import('./paper.js').Inks} inks
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>}} curve
 * @param {View} view @param {Plot} plot
 */
function drawColumns({ pen, scale }, inks, curve, view, plot) {
    const columns = columnsOf(
        curve.times,
        curve.flux,
        view,
        Math.max(1, Math.round(plot.width * scale))
    );
    const wide = plot.width / columns.count;
    const least = 1.5;
    /** @type {(column: number, high: number, low: number) => void} */
    const bar = (column, high, low) => {
        const top = fluxToY(view, plot, high);
        const tall = Math.max(fluxToY(view, plot, low) - top, least);
        pen.fillRect(plot.left + column * wide, top, wide, tall);
    };
    pen.fillStyle = inks.soft;
    for (let at = 0; at < columns.count; at++)
        if (columns.points[at] > 0) bar(at, columns.high[at], columns.low[at]);
    pen.fillStyle = inks.ink;
    for (let at = 0; at < columns.count; at++)
        if (columns.points[at] > 0)
            bar(
                at,
                Math.min(columns.mean[at] + 0.8 * columns.spread[at], columns.high[at]),
                Math.max(columns.mean[at] - 0.8 * columns.spread[at], columns.low[at])
            );
}
