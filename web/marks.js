/**
 * The reviewer's work on one segment: marks, conditions, which mark is chosen, and what can be
 * undone. Pure: each verb takes a Work and gives a new one.
 */
import { clamp } from './geometry.js';

/** @typedef {'sure' | 'unsure'} Certainty */
/** @typedef {'break' | 'keeps_changing'} Condition */
/**
 * Flux is as measured, whatever view it was drawn in.
 * @typedef {import('./geometry.js').Box & {id: number, certainty: Certainty}} Mark
 */
/** @typedef {{marks: readonly Mark[], conditions: readonly Condition[]}} Said */
/**
 * @typedef {object} Work
 * @property {Said} said
 * @property {number | null} chosen id of a mark
 * @property {readonly Said[]} past @property {readonly Said[]} future
 * @property {string} step what the last change was part of; a change of the same step is undone
 *     together with it. '' ends a step.
 * @property {number} nextId
 */
/** @typedef {{starts: number, ends: number, marksMost: number, leastDays: number}} Limits */

export const MARKS_MOST = 50;
const PAST_MOST = 500;

/** @type {readonly {name: Condition, label: string}[]} */
export const CONDITIONS = [
    { name: 'break', label: 'A break in the data' },
    { name: 'keeps_changing', label: 'Keeps changing' },
];

/** @returns {Work} */
export function workStart() {
    const said = { marks: [], conditions: [] };
    return { said, chosen: null, past: [], future: [], step: '', nextId: 1 };
}

/**
 * @param {Work} work @param {Said} said @param {string} step
 * @returns {Work}
 */
function changed(work, said, step) {
    const together = step !== '' && step === work.step && work.past.length > 0;
    const past = together ? work.past : [...work.past.slice(-(PAST_MOST - 1)), work.said];
    return { ...work, said, past, future: [], step };
}

/** @param {readonly Mark[]} marks @returns {Mark[]} by time, then by age */
const inOrder = (marks) => [...marks].sort((a, b) => a.starts - b.starts || a.id - b.id);

/**
 * A box made fit for the segment: within it, starts before ends, low not above high.
 * @param {import('./geometry.js').Box} box @param {Limits} limits
 * @returns {import('./geometry.js').Box}
 */
export function boxFit(box, limits) {
    const least = Math.min(limits.leastDays, limits.ends - limits.starts);
    const starts = clamp(Math.min(box.starts, box.ends), limits.starts, limits.ends - least);
    const ends = clamp(Math.max(box.starts, box.ends), starts + least, limits.ends);
    return { starts, ends, low: Math.min(box.low, box.high), high: Math.max(box.low, box.high) };
}

/**
 * Adds a mark and chooses it. The work comes back as it was when there are as many as there may be.
 * @param {Work} work @param {import('./geometry.js').Box} box @param {Limits} limits
 * @returns {Work}
 */
export function markAdd(work, box, limits) {
    if (work.said.marks.length >= limits.marksMost) return work;
    /** @type {Mark} */
    const mark = { ...boxFit(box, limits), id: work.nextId, certainty: 'sure' };
    const said = { ...work.said, marks: inOrder([...work.said.marks, mark]) };
    return { ...changed(work, said, ''), chosen: mark.id, nextId: work.nextId + 1 };
}

/**
 * @param {Work} work @param {number} id
 * @param {Partial<import('./geometry.js').Box & {certainty: Certainty}>} patch
 * @param {Limits} limits @param {string} [step] see Work.step
 * @returns {Work}
 */
export function markChange(work, id, patch, limits, step = '') {
    const old = work.said.marks.find((mark) => mark.id === id);
    if (!old) return work;
    const mark = { ...old, ...patch, ...boxFit({ ...old, ...patch }, limits) };
    const same = /** @type {(keyof Mark)[]} */ (Object.keys(mark)).every(
        (key) => mark[key] === old[key]
    );
    if (same) return work;
    const marks = inOrder(work.said.marks.map((other) => (other.id === id ? mark : other)));
    return { ...changed(work, { ...work.said, marks }, step), chosen: id };
}

/** @param {Work} work @param {number} id @returns {Work} */
export function markRemove(work, id) {
    const marks = work.said.marks.filter((mark) => mark.id !== id);
    if (marks.length === work.said.marks.length) return work;
    const chosen = work.chosen === id ? null : work.chosen;
    return { ...changed(work, { ...work.said, marks }, ''), chosen };
}

/** @param {Work} work @param {number | null} id @returns {Work} */
export function markChoose(work, id) {
    const chosen = work.said.marks.some((mark) => mark.id === id) ? id : null;
    return chosen === work.chosen ? work : { ...work, chosen, step: '' };
}

/** @param {Work} work @param {Condition} name @returns {Work} */
export function conditionToggle(work, name) {
    const has = work.said.conditions.includes(name);
    const conditions = CONDITIONS.map((condition) => condition.name).filter((known) =>
        known === name ? !has : work.said.conditions.includes(known)
    );
    return changed(work, { ...work.said, conditions }, '');
}

/** @param {Work} work @returns {Work} */
export const stepEnd = (work) => (work.step === '' ? work : { ...work, step: '' });

/** @param {Work} work @returns {Work} */
export function undo(work) {
    const said = work.past.at(-1);
    if (!said) return work;
    const next = {
        ...work,
        said,
        past: work.past.slice(0, -1),
        future: [work.said, ...work.future],
        step: '',
    };
    return markChoose(next, work.chosen);
}

/** @param {Work} work @returns {Work} */
export function redo(work) {
    const [said, ...future] = work.future;
    if (!said) return work;
    const next = { ...work, said, past: [...work.past, work.said], future, step: '' };
    return markChoose(next, work.chosen);
}

/**
 * The marks that a time lies in.
 * @param {Said} said @param {number} time
 */
export const marksAt = (said, time) =>
    said.marks.filter((mark) => mark.starts <= time && time <= mark.ends);

/**
 * The body of POST /reviews.
 * @param {Said} said @param {string} lease @param {number} seconds
 */
export function reviewBody(said, lease, seconds) {
    return {
        lease,
        marks: said.marks.map(({ starts, ends, low, high, certainty }) => ({
            starts,
            ends,
            low,
            high,
            certainty,
        })),
        conditions: [...said.conditions],
        seconds: clamp(seconds, 0, 86400),
    };
}

/**
 * Work that was kept over a reload: from JSON, hostile, or null when it makes no sense.
 * @param {unknown} kept @param {Limits} limits
 * @returns {Work | null}
 */
export function workRestore(kept, limits) {
    const said = /** @type {{marks?: unknown, conditions?: unknown} | null} */ (kept);
    if (typeof said !== 'object' || said === null) return null;
    if (!Array.isArray(said.marks) || !Array.isArray(said.conditions)) return null;
    let work = workStart();
    for (const mark of said.marks.slice(0, limits.marksMost)) {
        const numbers = [mark?.starts, mark?.ends, mark?.low, mark?.high];
        if (!numbers.every((number) => Number.isFinite(number))) return null;
        work = markAdd(work, mark, limits);
        if (mark.certainty === 'unsure' && work.chosen !== null)
            work = markChange(work, work.chosen, { certainty: 'unsure' }, limits);
    }
    const names = /** @type {unknown[]} */ (said.conditions);
    for (const { name } of CONDITIONS) if (names.includes(name)) work = conditionToggle(work, name);
    return { ...work, chosen: null, past: [], future: [], step: '' };
}
