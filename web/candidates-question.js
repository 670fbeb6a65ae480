/** What the Candidates page asks for, as it stands in its address. Pure. */
import { query } from './api.js';

/**
 * @typedef {object} Question
 * @property {string} min_probability @property {string} star @property {string} batch
 * @property {string} verdict @property {string} sort @property {string} cursor '' on the first page
 */

export const STANDARD_SORT = '-probability';
const NAMES = /** @type {const} */ ([
    'min_probability',
    'star',
    'batch',
    'verdict',
    'sort',
    'cursor',
]);

/** Columns that the list can be sorted by, and which way a first click sorts. */
export const SORTS = /** @type {const} */ ({
    star: { label: 'star', down: false },
    time: { label: 'mid-time', down: false },
    probability: { label: 'probability', down: true },
    snr: { label: 'SNR', down: true },
    depth: { label: 'depth', down: true },
    duration: { label: 'duration', down: true },
    looks: { label: 'looks', down: true },
    marks: { label: 'marks', down: true },
});
/** @typedef {keyof typeof SORTS} Sort */

/** @param {string} search of an address @returns {Question} */
export function questionOf(search) {
    const given = new URLSearchParams(search);
    const question = Object.fromEntries(NAMES.map((name) => [name, given.get(name)?.trim() ?? '']));
    const sort = question.sort.replace(/^-/, '');
    if (!(sort in SORTS)) question.sort = STANDARD_SORT;
    return /** @type {Question} */ (/** @type {unknown} */ (question));
}

/** The address of a question, without what is standard. @param {Question} question */
export function addressOf(question) {
    const sort = question.sort === STANDARD_SORT ? '' : question.sort;
    return `/candidates${query({ ...question, sort })}`;
}

/** The address of the whole table in a format. @param {Question} question @param {string} form */
export function tableOf(question, form) {
    return `/api/v1/candidates${query({ ...question, cursor: '', format: form })}`;
}

/** The order after a click on a heading. @param {string} now @param {Sort} sort */
export function sortedBy(now, sort) {
    if (now === sort) return `-${sort}`;
    if (now === `-${sort}`) return sort;
    return SORTS[sort].down ? `-${sort}` : sort;
}

/** @param {string} now @param {Sort} sort @returns {'ascending' | 'descending' | 'none'} */
export function sortState(now, sort) {
    if (now === sort) return 'ascending';
    return now === `-${sort}` ? 'descending' : 'none';
}
