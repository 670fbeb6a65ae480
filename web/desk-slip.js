/** The slip that says what had been put into a control, right after it was sent. */
import { el, part as byPart } from './dom.js';
import { drawMark } from './draw-strip.js';
import { drawPoints } from './draw-points.js';
import { fluxFit, heightsFor, timeToX } from './geometry.js';
import { hatch, inksNow, paperOf } from './paper.js';
import * as format from './format.js';

/** @typedef {import('./api.js').Control} Control */
/** @typedef {{sheet: import('./supply.js').Sheet, said: import('./marks.js').Said}} Sent */

/**
 * What is said of a control.
 * @param {Control} control @param {number} marks how many the reviewer had drawn
 */
export function controlSentence(control, marks) {
    if (control.kind === 'inverted') {
        const first =
            'The segment before this one was a control: its flux had been turned upside down, ' +
            'so that no real dip was in it.';
        const drawn = marks === 1 ? 'Your mark is' : 'Your marks are';
        return marks === 0
            ? `${first} You said that there was none.`
            : `${first} ${drawn} on something that is no dip.`;
    }
    const dips = control.dips;
    const places = dips.map(
        (dip) =>
            `from day ${format.time(dip.starts)} to ${format.time(dip.ends)} ` +
            `(${dip.found ? 'you found it' : 'you did not mark it'})`
    );
    const put =
        dips.length === 1
            ? 'a model dip had been put into it'
            : `${dips.length} model dips had been put into it`;
    return `The segment before this one was a control: ${put}, ${places.join('; ')}.`;
}

/** @param {HTMLElement} slip @param {string} text @param {HTMLElement[]} more */
function fill(slip, text, more) {
    const close = el(
        'button',
        { type: 'button', class: 'plain close', 'aria-label': 'Put the slip away' },
        'Close'
    );
    close.addEventListener('click', () => {
        slip.hidden = true;
    });
    slip.replaceChildren(el('p', {}, text), ...more, close);
    slip.hidden = false;
}

/** @param {string} text */
export function showSlip(text) {
    fill(byPart('slip'), text, []);
}

/** @param {Control} control @param {Sent | undefined} sent undefined after a reload */
export function showControl(control, sent) {
    const slip = byPart('slip');
    const text = controlSentence(control, sent?.said.marks.length ?? 0);
    if (!sent) return fill(slip, text, []);
    const canvas = el('canvas', { 'aria-hidden': 'true' });
    fill(slip, text, [canvas]);
    draw(canvas, control, sent);
}

/**
 * The segment small, the reviewer's marks in ochre, what was put there in teal with the other
 * slant.
 * @param {HTMLCanvasElement} canvas @param {Control} control @param {Sent} sent */
function draw(canvas, control, { sheet, said }) {
    const { width, height } = canvas.getBoundingClientRect();
    const paper = paperOf(canvas, width, height);
    if (paper === null) return;
    const inks = inksNow();
    const curve = sheet.flux.as_measured;
    const whole = { t0: sheet.lease.segment.starts, t1: sheet.lease.segment.ends };
    const plot = { left: 2, top: 2, width: width - 4, height: height - 4 };
    const view = { ...whole, ...fluxFit(curve.times, curve.flux, whole) };
    drawPoints(paper, inks, curve, view, plot);
    for (const mark of said.marks)
        drawMark(paper, inks, view, plot, {
            box: mark,
            name: '',
            sure: mark.certainty === 'sure',
            chosen: false,
        });
    paper.pen.strokeStyle = inks.consensus;
    paper.pen.lineWidth = 1.5;
    for (const dip of control.dips) {
        const left = timeToX(view, plot, dip.starts);
        const wide = Math.max(timeToX(view, plot, dip.ends) - left, 3);
        const { low } = heightsFor(curve.times, curve.flux, dip.starts, dip.ends);
        if (!Number.isFinite(low)) continue;
        hatch(paper.pen, { left, top: plot.top, width: wide, height: plot.height }, 6, -1);
        paper.pen.strokeRect(left, plot.top, wide, plot.height);
    }
}
