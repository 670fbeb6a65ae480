/** The whole segment small, with a window to drag and resize, by pointer and by keys. */
import { part as byPart } from './dom.js';
import { drawOverview, overviewPlot } from './draw-overview.js';
import * as format from './format.js';
import * as geometry from './geometry.js';
import { paperOf, unitNow } from './paper.js';

/** @typedef {import('./desk-model.js').DeskModel} DeskModel */

const REACH = 22;

/**
 * What of the window a pointer takes hold of. Edges reach outwards as far as a finger needs, and
 * inwards as far as leaves a third of the window to move it by.
 * @param {number} x @param {number} left @param {number} right of the window, CSS pixels
 * @returns {'t0' | 't1' | 'move' | 'beside'}
 */
export function heldAt(x, left, right) {
    const inner = Math.min(REACH, (right - left) / 3);
    if (x >= left - REACH && x < left + inner) return 't0';
    if (x <= right + REACH && x > right - inner) return 't1';
    return x > left && x < right ? 'move' : 'beside';
}

/** @param {DeskModel} model */
export function makeOverview(model) {
    const place = byPart('overview');
    const canvas = /** @type {HTMLCanvasElement} */ (byPart('overview-canvas'));
    const grip = byPart('window');
    let [width, height, unit] = [0, 0, 1];
    /** @type {{kind: 't0' | 't1' | 'move', by: number} | null} */
    let held = null;

    const plot = () => overviewPlot(width, height, unit);
    const view = () => ({ ...model.whole, f0: 0, f1: 1 });
    /** @param {PointerEvent} event */
    const timeOf = (event) =>
        geometry.xToTime(view(), plot(), event.clientX - place.getBoundingClientRect().left);

    place.addEventListener('pointerdown', (event) => {
        if (model.sheet === null || event.button !== 0 || held !== null) return;
        const [left, right] = [model.span.t0, model.span.t1].map((time) =>
            geometry.timeToX(view(), plot(), time)
        );
        const time = timeOf(event);
        const kind = heldAt(event.clientX - place.getBoundingClientRect().left, left, right);
        place.setPointerCapture(event.pointerId);
        if (kind === 'beside') centre(time);
        held =
            kind === 't0' || kind === 't1'
                ? { kind, by: time - model.span[kind] }
                : { kind: 'move', by: time - model.span.t0 };
    });
    place.addEventListener('pointermove', (event) => {
        if (held === null) return;
        const to = timeOf(event) - held.by;
        if (held.kind === 'move') {
            const t1 = to + model.span.t1 - model.span.t0;
            model.setSpan(geometry.spanWithin({ t0: to, t1 }, model.whole));
        } else
            model.setSpan(
                geometry.spanEdge(model.span, model.whole, held.kind, to, model.spanLeast)
            );
    });
    const release = () => {
        held = null;
    };
    place.addEventListener('pointerup', release);
    place.addEventListener('pointercancel', release);

    /** @param {number} time */
    function centre(time) {
        const half = (model.span.t1 - model.span.t0) / 2;
        model.setSpan(geometry.spanWithin({ t0: time - half, t1: time + half }, model.whole));
    }

    grip.addEventListener('keydown', (event) => {
        const big = event.shiftKey ? 5 : 1;
        /** @type {Record<string, () => void>} */
        const keys = {
            ArrowLeft: () => model.pan(-0.1 * big),
            ArrowRight: () => model.pan(0.1 * big),
            ArrowUp: () => model.zoom(1.25),
            ArrowDown: () => model.zoom(0.8),
            PageUp: () => model.pan(-1),
            PageDown: () => model.pan(1),
            Home: () => model.pan(-1e6),
            End: () => model.pan(1e6),
            '+': () => model.zoom(1.5),
            '-': () => model.zoom(1 / 1.5),
        };
        const act = event.ctrlKey || event.metaKey || event.altKey ? undefined : keys[event.key];
        if (!act) return;
        event.preventDefault();
        act();
    });

    return {
        /** @param {number} across @param {number} tall */
        setSize(across, tall) {
            [width, height, unit] = [across, tall, unitNow()];
        },
        /** @param {import('./paper.js').Inks} inks */
        draw(inks) {
            const paper = paperOf(canvas, width, height);
            if (paper === null || model.sheet === null) return;
            drawOverview(paper, inks, model.curve, model.whole, model.span, model.work.said.marks);
            placeGrip();
        },
    };

    function placeGrip() {
        const left = geometry.timeToX(view(), plot(), model.span.t0);
        const right = geometry.timeToX(view(), plot(), model.span.t1);
        grip.style.left = `${left}px`;
        grip.style.width = `${right - left}px`;
        const { t0, t1 } = model.span;
        grip.setAttribute('aria-valuemin', String(model.whole.t0));
        grip.setAttribute('aria-valuemax', String(model.whole.t1));
        grip.setAttribute('aria-valuenow', String((t0 + t1) / 2));
        grip.setAttribute('aria-valuetext', `day ${format.fixed(t0, 2)} to ${format.fixed(t1, 2)}`);
    }
}
