/** Draws the loupe: what lies about the pointer or the cursor, larger. */
import { drawPoints } from './draw-points.js';
import { drawMark } from './draw-strip.js';
import { fluxFit, fluxToY, spanWithin, timeToX } from './geometry.js';

const TIMES_LARGER = 5;

/**
 * What the loupe shows: about a time, drawn five times larger than on the strip.
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>}} curve
 * @param {import('./geometry.js').Span} whole @param {number} time
 * @param {number} daysPerPixel of the strip @param {number} width CSS pixels of the loupe
 * @param {number} leastDays
 * @returns {import('./geometry.js').View}
 */
export function loupeView(curve, whole, time, daysPerPixel, width, leastDays) {
    const half = Math.max((daysPerPixel * width) / TIMES_LARGER, leastDays) / 2;
    const span = spanWithin({ t0: time - half, t1: time + half }, whole);
    return { ...span, ...fluxFit(curve.times, curve.flux, span) };
}

/**
 * @param {import('./paper.js').Paper} paper @param {import('./paper.js').Inks} inks
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>}} curve
 * @param {import('./geometry.js').View} view
 * @param {{time: number, flux: number | null}} about
 * @param {import('./draw-strip.js').Shown[]} marks
 */
export function drawLoupe(paper, inks, curve, view, about, marks) {
    const { pen, width, height } = paper;
    const plot = { left: 1, top: 1, width: width - 2, height: height - 2 };
    const x = timeToX(view, plot, about.time);
    pen.strokeStyle = inks.faint;
    pen.lineWidth = 1;
    pen.beginPath();
    pen.moveTo(x, plot.top);
    pen.lineTo(x, plot.top + plot.height);
    if (about.flux !== null) {
        const y = fluxToY(view, plot, about.flux);
        pen.moveTo(plot.left, y);
        pen.lineTo(plot.left + plot.width, y);
    }
    pen.stroke();
    drawPoints(paper, inks, curve, view, plot);
    for (const mark of marks) drawMark(paper, inks, view, plot, mark);
}
