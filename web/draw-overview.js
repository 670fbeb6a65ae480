/** Draws the whole segment small, with the window that the strip shows. */
import { drawPoints } from './draw-points.js';
import { fluxFit, timeToX } from './geometry.js';
import { hatch } from './paper.js';
import { stripPlot } from './draw-strip.js';

/** @typedef {import('./geometry.js').Span} Span */

/**
 * @param {number} width
 * @param {number} height
 * @param {number} unit see Inks.unit
 * @returns {import('./geometry.js').Plot}
 */
export function overviewPlot(width, height, unit) {
    const { left, width: across } = stripPlot(width, height, unit);
    return { left, top: 4, width: across, height: Math.max(height - 8, 1) };
}

/**
 * @param {import('./paper.js').Paper} paper @param {import('./paper.js').Inks} inks
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>}} curve
 * @param {Span} whole @param {Span} shown
 * @param {readonly {starts: number, ends: number}[]} marks
 */
export function drawOverview(paper, inks, curve, whole, shown, marks) {
    const { pen } = paper;
    const plot = overviewPlot(paper.width, paper.height, inks.unit);
    const view = { ...whole, ...fluxFit(curve.times, curve.flux, whole) };
    pen.fillStyle = inks.band;
    if (!inks.forced) pen.fillRect(plot.left, plot.top, plot.width, plot.height);
    const from = timeToX(view, plot, shown.t0);
    const to = timeToX(view, plot, shown.t1);
    pen.clearRect(from, plot.top, to - from, plot.height);
    drawPoints(paper, inks, curve, view, plot, { dot: 1.6 * inks.unit });
    pen.strokeStyle = inks.own;
    pen.lineWidth = 1;
    for (const mark of marks) {
        const left = timeToX(view, plot, mark.starts);
        const width = Math.max(timeToX(view, plot, mark.ends) - left, 3);
        const rect = { left, top: plot.top, width, height: plot.height };
        hatch(pen, rect, 5, 1);
        pen.strokeRect(rect.left, rect.top, rect.width, rect.height);
    }
    pen.strokeStyle = inks.ink;
    pen.lineWidth = 1.5;
    pen.strokeRect(from, plot.top, to - from, plot.height);
    pen.fillStyle = inks.ground;
    for (const edge of [from, to]) {
        const rect = { left: edge - 4, top: plot.top + plot.height / 2 - 11, width: 8, height: 22 };
        pen.fillRect(rect.left, rect.top, rect.width, rect.height);
        pen.strokeRect(rect.left, rect.top, rect.width, rect.height);
        pen.beginPath();
        pen.moveTo(edge, rect.top + 6);
        pen.lineTo(edge, rect.top + 16);
        pen.stroke();
    }
}
