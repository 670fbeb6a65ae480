/** The strip chart on the page: pointer, wheel and the two canvases. */
import { part as byPart } from './dom.js';
import { drawCursor, drawMark, drawStripBase, stripPlot } from './draw-strip.js';
import * as format from './format.js';
import * as geometry from './geometry.js';
import { paperOf, unitNow } from './paper.js';

/** @typedef {import('./desk-model.js').DeskModel} DeskModel */
/** @typedef {{x: number, y: number}} Place */
/**
 * What the pointer is doing. `from` is where it went down.
 * @typedef {{kind: 'draw', from: Place, moved: boolean}
 *   | {kind: 'mark', from: Place, id: number, part: geometry.Part, box: geometry.Box, moved:
 * boolean}
 *   | {kind: 'pan', from: Place, span: geometry.Span}
 *   | {kind: 'pinch', span: geometry.Span, shares: [number, number]}
 *   | {kind: 'spent'}} Gesture
 */

const MOUSE = { reach: 8, slop: 4 };
const FINGER = { reach: 24, slop: 9 };

/** @param {DeskModel} model @param {{spoken: (text: string) => void}} options */
export function makeStrip(model, { spoken }) {
    const place = byPart('strip');
    const points = byPart('strip-points');
    const marks = byPart('strip-marks');
    /** @type {Map<number, Place>} */
    const pointers = new Map();
    /** @type {Gesture | null} */
    let gesture = null;
    let [width, height, unit] = [0, 0, 1];

    const plot = () => stripPlot(width, height, unit);
    /** @param {PointerEvent | WheelEvent} event @returns {Place} */
    function placeOf(event) {
        const rect = place.getBoundingClientRect();
        return { x: event.clientX - rect.left, y: event.clientY - rect.top };
    }
    /** @param {number} x */
    const timeAt = (x) => geometry.xToTime(model.view, plot(), x);
    /** @param {number} y */
    const fluxAt = (y) => geometry.yToFlux(model.view, plot(), y);
    /** @param {PointerEvent} event */
    const touching = (event) => (event.pointerType === 'touch' ? FINGER : MOUSE);

    /**
     * The mark under a place, the chosen one first. A finger takes hold of edges only of the chosen
     * mark, so that a box can be drawn close beside another.
     * @param {Place} at @param {PointerEvent} event
     */
    function markUnder(at, event) {
        const finger = event.pointerType === 'touch';
        const chosen = model.chosen;
        const others = model.work.said.marks.filter((mark) => mark !== chosen).reverse();
        for (const mark of chosen ? [chosen, ...others] : others) {
            const reach = finger && mark !== chosen ? 0 : touching(event).reach;
            const box = model.shown(mark);
            const part = geometry.partUnder(model.view, plot(), box, at.x, at.y, reach);
            if (part === null) continue;
            const held = finger && mark !== chosen ? INSIDE : part;
            return { mark, box, part: held };
        }
        return null;
    }

    function startPinch() {
        if (gesture?.kind === 'mark' && gesture.moved) model.undo();
        model.dropDraft();
        gesture = { kind: 'pinch', span: model.span, shares: fingerShares() };
    }

    /** @returns {[number, number]} */
    function fingerShares() {
        const { left, width: across } = plot();
        const [one, other] = [...pointers.values()].map((at) => (at.x - left) / across);
        return [one, other];
    }

    /** @param {PointerEvent} event */
    function down(event) {
        if (model.sheet === null || pointers.size >= 2) return;
        const at = placeOf(event);
        place.setPointerCapture(event.pointerId);
        pointers.set(event.pointerId, at);
        if (pointers.size === 2) return startPinch();
        if (event.button === 1) {
            event.preventDefault();
            gesture = { kind: 'pan', from: at, span: model.span };
            return;
        }
        if (event.button !== 0) return;
        model.begun = null;
        const under = event.shiftKey ? null : markUnder(at, event);
        if (under === null) gesture = { kind: 'draw', from: at, moved: false };
        else {
            const { mark, box, part } = under;
            gesture = { kind: 'mark', from: at, id: mark.id, part, box: { ...box }, moved: false };
        }
        model.setCursor(timeAt(at.x), fluxAt(at.y));
    }

    /** @param {PointerEvent} event */
    function move(event) {
        if (model.sheet === null) return;
        const at = placeOf(event);
        if (pointers.has(event.pointerId)) pointers.set(event.pointerId, at);
        if (gesture === null) hover(at, event);
        else if (gesture.kind === 'pinch') pinch();
        else if (gesture.kind === 'pan') pan(at, gesture);
        else if (gesture.kind !== 'spent') dragTo(at, gesture, touching(event).slop);
    }

    function pinch() {
        if (gesture?.kind !== 'pinch' || pointers.size !== 2) return;
        const { span, shares } = gesture;
        model.setSpan(
            geometry.spanPinch(span, shares, fingerShares(), model.whole, model.spanLeast)
        );
    }

    /** @param {Place} at @param {{from: Place, span: geometry.Span}} held */
    function pan(at, { from, span }) {
        const by = ((from.x - at.x) / plot().width) * (span.t1 - span.t0);
        model.setSpan(geometry.spanWithin({ t0: span.t0 + by, t1: span.t1 + by }, model.whole));
    }

    /** @param {Place} at @param {PointerEvent} event */
    function hover(at, event) {
        model.setCursor(timeAt(at.x), fluxAt(at.y));
        place.dataset.under = nameOfPart(
            event.shiftKey ? null : (markUnder(at, event)?.part ?? null)
        );
    }

    /**
     * @param {Place} at
     * @param {Extract<Gesture, {kind: 'draw' | 'mark'}>} held @param {number} slop
     */
    function dragTo(at, held, slop) {
        model.setCursor(timeAt(at.x), fluxAt(at.y));
        const [byX, byY] = [at.x - held.from.x, at.y - held.from.y];
        if (!held.moved && Math.hypot(byX, byY) < slop) return;
        held.moved = true;
        if (held.kind === 'draw') model.setDraft(draftTo(held.from, at));
        else {
            const days = timeAt(at.x) - timeAt(held.from.x);
            const flux = fluxAt(at.y) - fluxAt(held.from.y);
            model.drag(held.id, held.box, held.part, days, flux);
        }
    }

    /**
     * The box drawn so far; one drawn flat takes its heights from the data.
     * @param {Place} from
     * @param {Place} to
     */
    function draftTo(from, to) {
        const bounds = { t0: model.limits.starts, t1: model.limits.ends };
        const corner = (/** @type {Place} */ at) => ({ time: timeAt(at.x), flux: fluxAt(at.y) });
        const box = geometry.boxBetween(corner(from), corner(to), bounds, model.limits.leastDays);
        if (Math.abs(to.y - from.y) >= 10) return box;
        const { times, flux } = model.curve;
        return { ...box, ...geometry.heightsFor(times, flux, box.starts, box.ends) };
    }

    /** @param {PointerEvent} event */
    function up(event) {
        if (!pointers.delete(event.pointerId)) return;
        const held = gesture;
        gesture = pointers.size > 0 ? { kind: 'spent' } : null;
        if (held?.kind === 'mark') {
            model.choose(held.id);
            model.stepEnd();
        } else if (held?.kind === 'draw') {
            if (held.moved && model.draft !== null) finishDraft(model.draft);
            else model.choose(null);
        }
    }

    /** @param {geometry.Box} box */
    function finishDraft(box) {
        if (!model.add(box)) {
            spoken(`There may be at most ${model.limits.marksMost} marks.`);
            return;
        }
        const mark = model.chosen;
        if (mark)
            spoken(
                `Mark ${model.nameOf(mark)} drawn, ${format.hours(mark.ends - mark.starts)} hours.`
            );
    }

    /** @param {PointerEvent} event */
    function cancel(event) {
        if (!pointers.delete(event.pointerId)) return;
        if (gesture?.kind === 'mark' && gesture.moved) model.undo();
        model.dropDraft();
        gesture = pointers.size > 0 ? { kind: 'spent' } : null;
    }

    /** @param {WheelEvent} event */
    function wheel(event) {
        if (model.sheet === null) return;
        event.preventDefault();
        const at = placeOf(event);
        const unit = event.deltaMode === 1 ? 30 : event.deltaMode === 2 ? 300 : 1;
        const along = event.shiftKey && event.deltaX === 0 ? event.deltaY : event.deltaX;
        if (event.altKey) model.stretch(Math.exp(-event.deltaY * unit * 0.0015), fluxAt(at.y));
        else if (event.shiftKey || Math.abs(event.deltaX) > Math.abs(event.deltaY))
            model.pan((along * unit) / plot().width);
        else model.zoom(Math.exp(-event.deltaY * unit * 0.0015), timeAt(at.x));
        model.setCursor(timeAt(at.x), fluxAt(at.y));
    }

    place.addEventListener('pointerdown', down);
    place.addEventListener('pointermove', move);
    place.addEventListener('pointerup', up);
    place.addEventListener('pointercancel', cancel);
    place.addEventListener('wheel', wheel, { passive: false });

    return {
        plot,
        /** @param {number} across @param {number} tall */
        setSize(across, tall) {
            [width, height, unit] = [across, tall, unitNow()];
        },
        /** @param {import('./paper.js').Inks} inks */
        drawBase(inks) {
            const paper = paperOf(/** @type {HTMLCanvasElement} */ (points), width, height);
            if (paper === null || model.sheet === null) return;
            const axis = format.axis(model.sheet.lease.segment.time_reference);
            drawStripBase(paper, inks, model.curve, model.view, { axis, gaps: model.gaps });
        },
        /** @param {import('./paper.js').Inks} inks */
        drawMarks(inks) {
            const paper = paperOf(/** @type {HTMLCanvasElement} */ (marks), width, height);
            if (paper === null || model.sheet === null) return;
            for (const mark of shownMarks(model)) drawMark(paper, inks, model.view, plot(), mark);
            const byKeys = document.activeElement === place && model.cursor.flux === null;
            const flux = model.pointAt(model.cursor.time)?.flux ?? null;
            drawCursor(paper, inks, model.view, plot(), {
                time: model.cursor.time,
                flux,
                strong: byKeys,
            });
        },
    };
}

/** @type {geometry.Part} */
const INSIDE = { time: null, flux: null };

/** @param {geometry.Part | null} part for the pointer's shape */
function nameOfPart(part) {
    if (part === null) return 'paper';
    if (part.time !== null && part.flux !== null)
        return (part.time === 'starts') === (part.flux === 'high') ? 'falling' : 'rising';
    if (part.time !== null) return 'across';
    return part.flux !== null ? 'down' : 'inside';
}

/**
 * The marks as they are to be drawn, the chosen one last, and what is being drawn.
 * @param {DeskModel} model
 * @returns {import('./draw-strip.js').Shown[]}
 */
export function shownMarks(model) {
    const all = model.work.said.marks.map((mark) => ({
        box: model.shown(mark),
        name: model.nameOf(mark),
        sure: mark.certainty === 'sure',
        chosen: mark.id === model.work.chosen,
    }));
    all.sort((a, b) => Number(a.chosen) - Number(b.chosen));
    if (model.draft !== null) all.push({ box: model.draft, name: '', sure: true, chosen: false });
    return all;
}
