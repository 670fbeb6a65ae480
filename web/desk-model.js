/**
 * What is on the Desk: a segment, the window on it, the cursor, and the reviewer's work. Holds no
 * element and hears no event, so that it runs in node; each change is told to one listener.
 */
import { gaps, usualStep } from './flux.js';
import * as format from './format.js';
import * as geometry from './geometry.js';
import * as marks from './marks.js';

/** @typedef {import('./supply.js').Sheet} Sheet */
/** @typedef {import('./api.js').FluxView} FluxView */
/** @typedef {import('./geometry.js').Box} Box */
/** @typedef {import('./geometry.js').Span} Span */
/** @typedef {import('./marks.js').Mark} Mark */
/**
 * 'sheet': another segment; 'window': what the strip shows; 'work': marks, conditions or which mark
 * is chosen; 'cursor': the cursor or a box that is being drawn.
 * @typedef {'sheet' | 'window' | 'work' | 'cursor'} Change
 */

const SPAN_LEAST_CADENCES = 16;
const SPAN_LEAST_DAYS = 0.02;
const MARK_LEAST_DAYS = 0.0005;

export class DeskModel {
    /** @type {Sheet | null} */ sheet = null;
    /** @type {FluxView} */ fluxView = 'as_measured';
    work = marks.workStart();
    /** @type {Span} */ whole = { t0: 0, t1: 1 };
    /** @type {Span} */ span = { t0: 0, t1: 1 };
    /** @type {geometry.Range} */ range = { f0: 0.999, f1: 1.001 };
    /** Does the flux axis follow the window? */
    fit = true;
    /** Where the cursor is; flux is the pointer's, or null when keys moved it. */
    cursor = { time: 0, flux: /** @type {number | null} */ (null) };
    /** Where a mark was started by keys. @type {number | null} */
    begun = null;
    /** A box being drawn, in the flux shown. @type {Box | null} */
    draft = null;
    step = 0;
    /** @type {{starts: number, ends: number}[]} */ gaps = [];
    /** @type {marks.Limits} */
    limits = { starts: 0, ends: 1, marksMost: marks.MARKS_MOST, leastDays: MARK_LEAST_DAYS };
    /** @type {WeakMap<Mark, number>} */ #ratios = new WeakMap();
    #changed;

    /** @param {(what: Change) => void} changed */
    constructor(changed) {
        this.#changed = changed;
    }

    /** @param {Sheet} sheet @param {unknown} [kept] work on it from before a reload */
    open(sheet, kept) {
        const { starts, ends } = sheet.lease.segment;
        const { times } = sheet.flux.as_measured;
        this.sheet = sheet;
        this.step = usualStep(times);
        this.gaps = gaps(times, this.step);
        this.whole = { t0: starts, t1: Math.max(ends, starts + MARK_LEAST_DAYS) };
        this.limits = {
            starts: this.whole.t0,
            ends: this.whole.t1,
            marksMost: marks.MARKS_MOST,
            leastDays: Math.max(this.step, MARK_LEAST_DAYS),
        };
        this.work = marks.workRestore(kept, this.limits) ?? marks.workStart();
        this.span = this.whole;
        this.cursor = { time: times[0] ?? starts, flux: null };
        this.begun = null;
        this.draft = null;
        this.fit = true;
        this.#refit();
        this.#changed('sheet');
    }

    close() {
        this.sheet = null;
        this.work = marks.workStart();
        this.draft = null;
        this.begun = null;
        this.#changed('sheet');
    }

    /** The light curve of the view shown. */
    get curve() {
        return this.sheet === null ? NOTHING : this.sheet.flux[this.fluxView];
    }

    /** @returns {geometry.View} */
    get view() {
        return { ...this.span, ...this.range };
    }

    #refit() {
        if (this.fit) this.range = geometry.fluxFit(this.curve.times, this.curve.flux, this.span);
    }

    // ---- the window ----

    get spanLeast() {
        return Math.max(SPAN_LEAST_CADENCES * this.step, SPAN_LEAST_DAYS);
    }

    /** @param {Span} span */
    setSpan(span) {
        if (span.t0 === this.span.t0 && span.t1 === this.span.t1) return;
        this.span = span;
        this.#refit();
        this.#changed('window');
    }

    /** @param {number} factor @param {number} [about] days */
    zoom(factor, about = this.#middle()) {
        this.setSpan(geometry.spanZoom(this.span, this.whole, factor, about, this.spanLeast));
    }

    /** @param {number} share of the window */
    pan(share) {
        const by = share * (this.span.t1 - this.span.t0);
        const moved = { t0: this.span.t0 + by, t1: this.span.t1 + by };
        this.setSpan(geometry.spanWithin(moved, this.whole));
    }

    /** @param {number} time */
    showTime(time) {
        this.setSpan(geometry.spanShowing(this.span, this.whole, time));
    }

    /** The cursor where it is in sight, else the middle of the window. */
    #middle() {
        const { time } = this.cursor;
        const seen = time >= this.span.t0 && time <= this.span.t1;
        return seen ? time : (this.span.t0 + this.span.t1) / 2;
    }

    /** @param {boolean} fit */
    setFit(fit) {
        this.fit = fit;
        if (fit) this.#refit();
        else this.range = geometry.fluxFit(this.curve.times, this.curve.flux, this.whole);
        this.#changed('window');
    }

    /** @param {number} factor > 1: less flux on the same paper @param {number} [about] */
    stretch(factor, about = (this.range.f0 + this.range.f1) / 2) {
        const range = geometry.rangeZoom(this.range, factor, about);
        if (!(range.f1 - range.f0 > 1e-7) || range.f1 - range.f0 > 100) return;
        this.fit = false;
        this.range = range;
        this.#changed('window');
    }

    /** @param {FluxView} fluxView */
    setFluxView(fluxView) {
        this.fluxView = fluxView;
        this.draft = null;
        if (!this.fit) this.range = geometry.fluxFit(this.curve.times, this.curve.flux, this.whole);
        this.#refit();
        this.#changed('window');
    }

    // ---- between the flux shown and the flux as measured ----

    /** @param {Box} box */
    #ratio(box) {
        if (this.sheet === null || this.fluxView === 'as_measured') return 1;
        const { as_measured: measured, trend_removed: removed } = this.sheet.flux;
        return geometry.levelRatio(
            measured.times,
            measured.flux,
            removed.flux,
            box.starts,
            box.ends
        );
    }

    /** A mark's box in the flux shown. @param {Mark} mark @returns {Box} */
    shown(mark) {
        if (this.fluxView === 'as_measured') return mark;
        let ratio = this.#ratios.get(mark);
        if (ratio === undefined) {
            ratio = this.#ratio(mark);
            this.#ratios.set(mark, ratio);
        }
        return { ...mark, low: mark.low / ratio, high: mark.high / ratio };
    }

    /** A box drawn on the view shown, in the flux as measured. @param {Box} box @returns {Box} */
    measured(box) {
        const ratio = this.#ratio(box);
        return { ...box, low: box.low * ratio, high: box.high * ratio };
    }

    // ---- the cursor ----

    /** @param {number} time @param {number | null} [flux] the pointer's */
    setCursor(time, flux = null) {
        this.cursor = { time: geometry.clamp(time, this.whole.t0, this.whole.t1), flux };
        this.#changed('cursor');
    }

    /** Moves the cursor by keys, and the window with it. @param {number} share of the window */
    moveCursor(share) {
        this.setCursorByKeys(this.cursor.time + share * (this.span.t1 - this.span.t0));
    }

    /** @param {number} time */
    setCursorByKeys(time) {
        this.setCursor(time);
        this.showTime(this.cursor.time);
        if (this.begun !== null) this.draft = this.#boxByTimes(this.begun, this.cursor.time);
        this.#changed('cursor');
    }

    /** The point nearest to a time. @param {number} time */
    pointAt(time) {
        const at = geometry.nearestAt(this.curve.times, time);
        return at < 0 ? null : { time: this.curve.times[at], flux: this.curve.flux[at] };
    }

    /** What a listener is told of a time. @param {number} time */
    describe(time) {
        const point = this.pointAt(time);
        const inside = marks.marksAt(this.work.said, time);
        const gap = this.gaps.some((one) => one.starts < time && time < one.ends);
        const flux = gap || point === null ? 'no data' : `flux ${format.flux(point.flux)}`;
        const where = inside.map((mark) => `in mark ${this.nameOf(mark)}`);
        if (this.begun !== null) where.push('mark begun');
        return [`day ${format.time(time)}`, flux, ...where].join(', ');
    }

    // ---- marks ----

    /** A mark's name: its place in time, from 1. @param {Mark} mark */
    nameOf(mark) {
        return String(this.work.said.marks.findIndex((one) => one.id === mark.id) + 1);
    }

    get chosen() {
        return this.work.said.marks.find((mark) => mark.id === this.work.chosen) ?? null;
    }

    /** @param {marks.Work} work */
    #setWork(work) {
        if (work === this.work) return;
        this.work = work;
        this.#changed('work');
    }

    /** @param {number} one @param {number} other times @returns {Box} in the flux shown */
    #boxByTimes(one, other) {
        const starts = Math.min(one, other);
        const ends = Math.max(one, other);
        return {
            starts,
            ends,
            ...geometry.heightsFor(this.curve.times, this.curve.flux, starts, ends),
        };
    }

    /** @param {Box | null} box in the flux shown */
    setDraft(box) {
        this.draft = box;
        this.#changed('cursor');
    }

    /**
     * Adds a box drawn on the view shown. False when there are too many already.
     * @param {Box} box
     */
    add(box) {
        const before = this.work.said.marks.length;
        const fit = marks.boxFit(box, this.limits);
        this.draft = null;
        this.#setWork(marks.markAdd(this.work, this.measured(fit), this.limits));
        this.#changed('cursor');
        return this.work.said.marks.length > before;
    }

    /**
     * Adds a mark by its times, its heights taken from the data.
     * @param {number} one
     * @param {number} other
     */
    addByTimes(one, other) {
        const { starts, ends } = marks.boxFit(
            { starts: one, ends: other, low: 1, high: 1 },
            this.limits
        );
        return this.add(this.#boxByTimes(starts, ends));
    }

    /**
     * Starts a mark at the cursor, or ends the one that was started.
     * @returns {'begun' | 'added' | 'full'}
     */
    beginOrEnd() {
        const { time } = this.cursor;
        if (this.begun === null) {
            this.begun = time;
            this.draft = this.#boxByTimes(time, time);
            this.#changed('cursor');
            return 'begun';
        }
        const from = this.begun;
        this.begun = null;
        return this.addByTimes(from, time) ? 'added' : 'full';
    }

    dropDraft() {
        this.begun = null;
        this.draft = null;
        this.#changed('cursor');
    }

    /**
     * Drags a part of a mark; steps of one drag are undone together.
     * @param {number} id @param {Box} from the box shown when the drag began
     * @param {geometry.Part} part @param {number} byDays @param {number} byFlux
     */
    drag(id, from, part, byDays, byFlux) {
        const bounds = { t0: this.limits.starts, t1: this.limits.ends };
        const box = geometry.boxDrag(from, part, byDays, byFlux, bounds, this.limits.leastDays);
        const patch = this.measured(box);
        this.#setWork(marks.markChange(this.work, id, patch, this.limits, `drag ${id}`));
    }

    /**
     * @param {number} id
     * @param {Partial<Box & {certainty: marks.Certainty}>} patch
     * @param {string} [step]
     */
    change(id, patch, step) {
        this.#setWork(marks.markChange(this.work, id, patch, this.limits, step));
    }

    /**
     * Moves one edge in time.
     * @param {number} id
     * @param {'starts' | 'ends'} edge
     * @param {number} days
     */
    nudge(id, edge, days) {
        const mark = this.work.said.marks.find((one) => one.id === id);
        if (!mark) return;
        const part = /** @type {geometry.Part} */ ({ time: edge, flux: null });
        const bounds = { t0: this.limits.starts, t1: this.limits.ends };
        const box = geometry.boxDrag(mark, part, days, 0, bounds, this.limits.leastDays);
        const patch = edge === 'starts' ? { starts: box.starts } : { ends: box.ends };
        this.change(id, patch, `nudge ${id} ${edge}`);
    }

    /** How far one press of an arrow key goes, in days. @param {boolean} big */
    nudgeStep(big) {
        const small = Math.max((this.span.t1 - this.span.t0) / 400, this.step / 2, 1e-5);
        return big ? small * 10 : small;
    }

    /** @param {number} id */
    remove(id) {
        this.#setWork(marks.markRemove(this.work, id));
    }

    /** @param {number | null} id */
    choose(id) {
        this.#setWork(marks.markChoose(this.work, id));
    }

    /** @param {marks.Condition} name */
    toggleCondition(name) {
        this.#setWork(marks.conditionToggle(this.work, name));
    }

    stepEnd() {
        this.work = marks.stepEnd(this.work);
    }

    undo() {
        this.dropDraft();
        this.#setWork(marks.undo(this.work));
    }

    redo() {
        this.#setWork(marks.redo(this.work));
    }
}

/** @type {import('./flux.js').Flux} */
const NOTHING = {
    reference: 0,
    medianFlux: 1,
    noise: 0,
    times: new Float64Array(0),
    flux: new Float64Array(0),
};
