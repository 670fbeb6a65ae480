/** Draws the strip chart: axes and points on one canvas, marks and cursor on another above it. */
import { drawPoints } from './draw-points.js';
import { fluxToY, ticks, timeToX } from './geometry.js';
import { hatch } from './paper.js';
import * as format from './format.js';

/** @typedef {import('./paper.js').Paper} Paper */
/** @typedef {import('./paper.js').Inks} Inks */
/** @typedef {import('./geometry.js').View} View */
/** @typedef {import('./geometry.js').Plot} Plot */
/** @typedef {import('./geometry.js').Box} Box */

/**
 * Where the points lie within the paper.
 * @param {number} width @param {number} height @param {number} unit see Inks.unit
 * @returns {Plot}
 */
export function stripPlot(width, height, unit) {
    const left = (width < 560 ? 56 : 72) * unit;
    const below = 48 * unit;
    return {
        left,
        top: 12,
        width: Math.max(width - left - 10, 1),
        height: Math.max(height - below - 12, 1),
    };
}

/** @param {Inks} inks @param {number} size for text of 16 px @param {string} [style] */
const fontOf = (inks, size, style = '') =>
    `${style} ${(size * inks.unit).toFixed(1)}px ${inks.font}`;

/** A hairline through the middle of a device pixel. @param {number} at @param {number} scale */
const crisp = (at, scale) => (Math.floor(at * scale) + 0.5) / scale;

/**
 * @param {Paper} paper @param {Inks} inks
 * @param {{times: ArrayLike<number>, flux: ArrayLike<number>, noise: number}} curve
 * @param {View} view
 * @param {{axis: string, gaps: {starts: number, ends: number}[]}} labels
 */
export function drawStripBase(paper, inks, curve, view, labels) {
    const plot = stripPlot(paper.width, paper.height, inks.unit);
    drawDays(paper, inks, view, plot);
    drawGaps(paper, inks, view, plot, labels.gaps);
    drawFluxAxis(paper, inks, view, plot);
    drawTimeAxis(paper, inks, view, plot, labels.axis);
    drawPoints(paper, inks, curve, view, plot);
    drawNoise(paper, inks, curve.noise, view, plot);
}

/** Every other day a little darker, as the columns of a printed table.
 * @param {Paper} paper @param {Inks} inks @param {View} view @param {Plot} plot */
function drawDays({ pen }, inks, view, plot) {
    const days = view.t1 - view.t0;
    if (inks.forced || days > 60) return;
    pen.fillStyle = inks.band;
    for (let day = Math.floor(view.t0); day < view.t1; day++) {
        if (Math.abs(day % 2) !== 1) continue;
        const from = Math.max(timeToX(view, plot, day), plot.left);
        const to = Math.min(timeToX(view, plot, day + 1), plot.left + plot.width);
        if (to > from) pen.fillRect(from, plot.top, to - from, plot.height);
    }
}

/** @param {Paper} paper @param {Inks} inks @param {View} view @param {Plot} plot
 * @param {{starts: number, ends: number}[]} gaps */
function drawGaps({ pen }, inks, view, plot, gaps) {
    pen.font = fontOf(inks, 12, 'italic');
    pen.textAlign = 'center';
    pen.textBaseline = 'middle';
    pen.fillStyle = inks.ink;
    for (const gap of gaps) {
        const from = Math.max(timeToX(view, plot, gap.starts), plot.left);
        const to = Math.min(timeToX(view, plot, gap.ends), plot.left + plot.width);
        if (to - from > 56 * inks.unit)
            pen.fillText('no data', (from + to) / 2, plot.top + plot.height / 2);
    }
}

/** @param {Paper} paper @param {Inks} inks @param {View} view @param {Plot} plot */
function drawFluxAxis({ pen, scale }, inks, view, plot) {
    const axis = ticks(view.f0, view.f1, Math.max(3, Math.floor(plot.height / (44 * inks.unit))));
    pen.font = fontOf(inks, 12);
    pen.textAlign = 'right';
    pen.textBaseline = 'middle';
    pen.lineWidth = 1 / scale;
    for (const value of axis.values) {
        const y = crisp(fluxToY(view, plot, value), scale);
        pen.strokeStyle = inks.faint;
        pen.beginPath();
        pen.moveTo(plot.left - 5, y);
        pen.lineTo(plot.left + plot.width, y);
        pen.stroke();
        pen.fillStyle = inks.ink;
        pen.fillText(format.fixed(value, axis.decimals), plot.left - 8, y);
    }
    pen.save();
    pen.translate(10 * inks.unit, plot.top + plot.height / 2);
    pen.rotate(-Math.PI / 2);
    pen.textAlign = 'center';
    pen.font = fontOf(inks, 12, 'italic');
    if (plot.left > 60 * inks.unit) pen.fillText('flux, relative', 0, 0);
    pen.restore();
}

/** @param {Paper} paper @param {Inks} inks @param {View} view @param {Plot} plot
 * @param {string} title */
function drawTimeAxis({ pen, scale, height }, inks, view, plot, title) {
    const bottom = plot.top + plot.height;
    const axis = ticks(view.t0, view.t1, Math.max(2, Math.floor(plot.width / (76 * inks.unit))));
    pen.font = fontOf(inks, 12);
    pen.textAlign = 'center';
    pen.textBaseline = 'alphabetic';
    pen.lineWidth = 1 / scale;
    pen.strokeStyle = inks.faint;
    pen.fillStyle = inks.ink;
    for (const value of axis.values) {
        const x = crisp(timeToX(view, plot, value), scale);
        pen.beginPath();
        pen.moveTo(x, plot.top);
        pen.lineTo(x, bottom + 5);
        pen.stroke();
        pen.fillText(format.fixed(value, axis.decimals), x, bottom + 7 + 13 * inks.unit);
    }
    pen.strokeStyle = inks.ink;
    pen.beginPath();
    for (const y of [plot.top, bottom, bottom + 2.5]) {
        pen.moveTo(plot.left, crisp(y, scale));
        pen.lineTo(plot.left + plot.width, crisp(y, scale));
    }
    pen.moveTo(crisp(plot.left, scale), plot.top);
    pen.lineTo(crisp(plot.left, scale), bottom);
    pen.stroke();
    pen.font = fontOf(inks, 12, 'italic');
    pen.fillText(title, plot.left + plot.width / 2, height - 8 * inks.unit);
}

/** The usual scatter of a point, as a bar beside the axis.
 * @param {Paper} paper @param {Inks} inks @param {number} noise @param {View} view @param {Plot}
 * plot
 */
function drawNoise({ pen }, inks, noise, view, plot) {
    const tall = (2 * noise * plot.height) / (view.f1 - view.f0);
    if (!(tall > 4) || tall > plot.height / 2) return;
    const x = plot.left + 8;
    const y = plot.top + plot.height - 8 - tall;
    pen.strokeStyle = inks.ink;
    pen.lineWidth = 1.25;
    pen.beginPath();
    for (const end of [y, y + tall]) {
        pen.moveTo(x - 3, end);
        pen.lineTo(x + 3, end);
    }
    pen.moveTo(x, y);
    pen.lineTo(x, y + tall);
    pen.stroke();
    pen.font = fontOf(inks, 11, 'italic');
    pen.textAlign = 'left';
    pen.textBaseline = 'middle';
    pen.fillStyle = inks.ink;
    pen.fillText('± scatter', x + 7, y + tall / 2);
}

/**
 * @typedef {object} Shown a mark as it is to be drawn
 * @property {Box} box in the flux of the view shown @property {string} name
 * @property {boolean} sure @property {boolean} chosen
 */

/**
 * @param {Paper} paper @param {Inks} inks @param {View} view @param {Plot} plot
 * @param {Shown} mark
 */
export function drawMark({ pen }, inks, view, plot, mark) {
    const left = timeToX(view, plot, mark.box.starts);
    const right = timeToX(view, plot, mark.box.ends);
    const top = fluxToY(view, plot, mark.box.high);
    const rect = {
        left,
        top,
        width: right - left,
        height: Math.max(fluxToY(view, plot, mark.box.low) - top, 1),
    };
    pen.save();
    pen.beginPath();
    pen.rect(plot.left, 0, plot.width, plot.top + plot.height);
    pen.clip();
    pen.strokeStyle = inks.own;
    pen.fillStyle = inks.own;
    pen.lineWidth = 1;
    pen.globalAlpha = mark.chosen ? 0.55 : 0.4;
    hatch(pen, rect, mark.sure ? 9 : 18, 1);
    pen.globalAlpha = 1;
    pen.lineWidth = mark.chosen ? 2.5 : 1.75;
    pen.setLineDash(mark.sure ? [] : [6, 4]);
    pen.strokeRect(rect.left, rect.top, rect.width, rect.height);
    pen.setLineDash([]);
    pen.font = fontOf(inks, 13, 'bold');
    pen.textAlign = 'left';
    pen.textBaseline = 'alphabetic';
    if (right > plot.left) drawName(pen, inks, mark, Math.max(left, plot.left + 2), rect);
    if (mark.chosen) drawHandles(pen, inks, rect);
    pen.restore();
}

/** Above the box, or below it where the paper ends; with a rim of ground, to be read over points.
 * @param {CanvasRenderingContext2D} pen @param {Inks} inks @param {Shown} mark @param {number} left
 * @param {import('./paper.js').Rect} rect */
function drawName(pen, inks, mark, left, rect) {
    const base = rect.top - 6 > 12 ? rect.top - 6 : rect.top + rect.height + 15;
    const text = mark.name + (mark.sure ? '' : ' ?');
    pen.strokeStyle = inks.ground;
    pen.lineWidth = 4;
    pen.lineJoin = 'round';
    pen.strokeText(text, left, base);
    pen.fillText(text, left, base);
    pen.strokeStyle = inks.own;
}

/**
 * @param {CanvasRenderingContext2D} pen
 * @param {Inks} inks
 * @param {import('./paper.js').Rect} rect
 */
function drawHandles(pen, inks, rect) {
    pen.fillStyle = inks.ground;
    pen.lineWidth = 1.5;
    const across = rect.width > 30 ? [0, 0.5, 1] : [0, 1];
    const down = rect.height > 30 ? [0, 0.5, 1] : [0, 1];
    for (const x of across)
        for (const y of down) {
            if (x === 0.5 && y === 0.5) continue;
            const at = [rect.left + x * rect.width - 3.5, rect.top + y * rect.height - 3.5];
            pen.fillRect(at[0], at[1], 7, 7);
            pen.strokeRect(at[0], at[1], 7, 7);
        }
}

/**
 * The cursor: a rule through its time, a ring about the point under it.
 * @param {Paper} paper @param {Inks} inks @param {View} view @param {Plot} plot
 * @param {{time: number, flux: number | null, strong: boolean}} cursor
 */
export function drawCursor({ pen }, inks, view, plot, cursor) {
    if (cursor.time < view.t0 || cursor.time > view.t1) return;
    const x = timeToX(view, plot, cursor.time);
    pen.strokeStyle = inks.ink;
    pen.lineWidth = cursor.strong ? 1.5 : 1;
    pen.setLineDash([2, 3]);
    pen.beginPath();
    pen.moveTo(x, plot.top);
    pen.lineTo(x, plot.top + plot.height);
    pen.stroke();
    pen.setLineDash([]);
    if (cursor.flux === null || !cursor.strong) return;
    pen.lineWidth = 2;
    pen.beginPath();
    pen.arc(x, fluxToY(view, plot, cursor.flux), 6, 0, 2 * Math.PI);
    pen.stroke();
}
