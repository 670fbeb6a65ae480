/**
 * Candidates: the ranked list, its filters and order in the address, and the consensus run behind
 * it.
 */
import * as api from './api.js';
import { makeCloser } from './candidates-closer.js';
import * as questions from './candidates-question.js';
import { atWork, el, part as byPart, say, sentence, show } from './dom.js';
import * as format from './format.js';
import { joinSheet } from './join-sheet.js';
import { fillMasthead, mayRank } from './masthead.js';
import { inksNow, watchInks } from './paper.js';
import { curveOf, drawThumbnail } from './thumbnail.js';

/** @typedef {import('./candidates-question.js').Sort} Sort */

const PAGE = 50;
const POLL_MS = 1000;

/** @type {{label: string, sort?: Sort, text?: boolean}[]} */
const COLUMNS = [
    { label: 'Light curve', text: true },
    { label: 'No.' },
    { label: 'Star', sort: 'star', text: true },
    { label: 'Mid-time, d', sort: 'time' },
    { label: 'Probability', sort: 'probability' },
    { label: 'SNR', sort: 'snr' },
    { label: 'Depth, %', sort: 'depth' },
    { label: 'Duration, h', sort: 'duration' },
    { label: 'Looks', sort: 'looks' },
    { label: 'Marks', sort: 'marks' },
    { label: 'Period, d' },
    { label: 'Verdict', text: true },
];

let question = questions.questionOf(location.search);
let asked = 0;
const closer = makeCloser({ onVerdict: () => void refresh() });

/** @type {Map<Element, any>} */
const unseen = new Map();
const watcher = new IntersectionObserver(
    (entries) => {
        for (const { isIntersecting, target } of entries) {
            if (!isIntersecting) continue;
            watcher.unobserve(target);
            void fillThumbnail(/** @type {HTMLCanvasElement} */ (target), unseen.get(target));
        }
    },
    { rootMargin: '200px' }
);

/** @param {HTMLCanvasElement} canvas @param {any} row */
async function fillThumbnail(canvas, row) {
    try {
        drawThumbnail(canvas, await curveOf(row), row, inksNow());
    } catch (error) {
        canvas.replaceWith(el('span', { class: 'faded', title: sentence(error) }, 'not to be had'));
    }
}

/** @param {number | null} value @param {(value: number) => string} write */
const or = (value, write) => (typeof value === 'number' ? write(value) : '–');

/** @param {any} row */
function rowOf(row) {
    const canvas = el('canvas', { class: 'thumbnail', 'aria-hidden': 'true' });
    unseen.set(canvas, row);
    watcher.observe(canvas);
    const open = el(
        'button',
        { type: 'button', class: 'plain', onclick: () => void closer.open(row.candidate) },
        String(row.candidate)
    );
    open.setAttribute('aria-label', `Candidate ${row.candidate}, a closer look`);
    const share = el('span', { class: 'share', 'aria-hidden': 'true' });
    share.style.setProperty('--share', String(row.probability));
    const percent = (/** @type {number | null} */ ppm) =>
        typeof ppm === 'number' ? ppm / 1e4 : null;
    /** @type {(Node | string)[]} */
    const cells = [
        canvas,
        open,
        row.star,
        or(row.mid_time, format.time),
        el('span', {}, format.probability(row.probability), share),
        or(row.snr, (value) => format.fixed(value, 1)),
        format.withError(percent(row.depth_ppm), percent(row.depth_error_ppm), 3),
        format.withError(row.duration_h, row.duration_error_h, 2),
        String(row.looks),
        String(row.marks),
        or(row.period_d, (value) => format.fixed(value, 4)),
        row.verdict || 'none',
    ];
    return el(
        'tr',
        { role: 'row' },
        ...cells.map((cell, at) => {
            const { label, text } = COLUMNS[at];
            const tag = at === 2 ? 'th' : 'td';
            return el(
                tag,
                {
                    role: at === 2 ? 'rowheader' : 'cell',
                    scope: at === 2 ? 'row' : null,
                    class: [text ? 'text' : '', `c-${at}`].join(' '),
                    'data-label': label,
                },
                cell
            );
        })
    );
}

function fillHeads() {
    byPart('heads').replaceChildren(
        ...COLUMNS.map(({ label, sort, text }) => {
            const head = el('th', {
                role: 'columnheader',
                scope: 'col',
                class: text ? 'text' : '',
            });
            if (!sort) head.append(label);
            else {
                const state = questions.sortState(question.sort, sort);
                head.setAttribute('aria-sort', state);
                const arrow = { ascending: '↑', descending: '↓', none: '' }[state];
                const button = el(
                    'button',
                    { type: 'button', class: 'plain heading', 'data-sort': sort },
                    label
                );
                button.append(el('span', { 'aria-hidden': 'true', class: 'arrow' }, arrow));
                button.addEventListener('click', () => sortBy(sort));
                head.append(button);
            }
            return head;
        })
    );
}

/** @param {Sort} sort */
function sortBy(sort) {
    go({ ...question, sort: questions.sortedBy(question.sort, sort), cursor: '' });
    /** @type {HTMLElement | null} */ (document.querySelector(`[data-sort="${sort}"]`))?.focus();
}

function fillFilters() {
    const form = /** @type {HTMLFormElement} */ (byPart('filters'));
    for (const name of /** @type {const} */ ([
        'min_probability',
        'star',
        'batch',
        'verdict',
        'sort',
    ])) {
        const field = /** @type {HTMLInputElement | HTMLSelectElement} */ (
            form.elements.namedItem(name)
        );
        field.value = question[name];
    }
}

/** @param {any} run */
function fillRun(run) {
    say(
        byPart('run'),
        run === null
            ? 'No consensus run yet, so there is no list.'
            : `Run ${run.run} over ${format.counted(run.reviews, 'review')}, finished ` +
                  `${run.finished ? format.moment(run.finished) : 'not yet'}.`
    );
}

/** @param {any} list */
function fillList(list) {
    fillRun(list.run);
    say(byPart('caution'), list.caution);
    say(byPart('total'), format.counted(list.total, 'candidate'));
    for (const canvas of unseen.keys()) watcher.unobserve(canvas);
    unseen.clear();
    byPart('rows').replaceChildren(...list.candidates.map(rowOf));
    const some = list.candidates.length > 0;
    show(byPart('table'), some);
    show(byPart('none'), !some);
    say(
        byPart('none'),
        list.run === null
            ? 'Once reviews have come in, run the consensus.'
            : 'No candidate is like this.'
    );
    fillPages(list.next);
    const csv = /** @type {HTMLAnchorElement} */ (byPart('csv'));
    csv.href = questions.tableOf(question, 'csv');
}

/**
 * The pages before this one, as their cursors; kept with each entry of the browser's history.
 * @returns {string[]}
 */
const before = () => history.state?.before ?? [];

/** @param {string | null} next */
function fillPages(next) {
    link('first', question.cursor === '' ? null : { ...question, cursor: '' });
    const last = before().at(-1);
    link(
        'back',
        question.cursor === '' || last === undefined ? null : { ...question, cursor: last }
    );
    link('next', next === null ? null : { ...question, cursor: next });
}

/** @param {string} name @param {questions.Question | null} to */
function link(name, to) {
    const anchor = /** @type {HTMLAnchorElement} */ (byPart(name));
    show(anchor, to !== null);
    if (to !== null) anchor.href = questions.addressOf(to);
}

async function refresh() {
    const mine = ++asked;
    say(byPart('trouble'), '');
    fillHeads();
    fillFilters();
    byPart('table').setAttribute('aria-busy', 'true');
    try {
        const list = await api.candidates({ ...question, limit: PAGE });
        if (mine !== asked) return;
        fillList(list);
        show(byPart('list'), true);
    } catch (error) {
        if (mine !== asked) return;
        if (error instanceof api.Problem && error.status === 401) return askWho();
        show(byPart('list'), true);
        say(byPart('trouble'), sentence(error));
    } finally {
        if (mine === asked) byPart('table').removeAttribute('aria-busy');
    }
}

/** @param {questions.Question} to @param {string[]} [pages] before it */
function go(to, pages = []) {
    question = to;
    history.pushState({ before: pages }, '', questions.addressOf(to));
    void refresh();
}

// ---- the consensus run ----

async function runNow() {
    try {
        await api.startRun();
    } catch (error) {
        if (!(error instanceof api.Problem) || error.status !== 409) throw error;
    }
    await followRun();
}

/** Watches the run at work to its end, then shows the new list. */
async function followRun() {
    const progress = /** @type {HTMLProgressElement} */ (byPart('progress'));
    show(progress, true);
    say(byPart('run-note'), 'The consensus is being run.');
    try {
        let state = await api.runState();
        while (state.state === 'working') {
            progress.value = state.fraction ?? 0;
            await new Promise((resolve) => setTimeout(resolve, POLL_MS));
            state = await api.runState();
        }
        const failed = state.last_error ?? null;
        say(byPart('run-note'), failed === null ? 'Done.' : `The run failed: ${failed}`);
    } finally {
        show(progress, false);
    }
    await refresh();
}

// ---- who is there ----

function askWho() {
    fillMasthead(null);
    show(byPart('list'), false);
    show(byPart('join'), true);
    joinSheet(byPart('join'), {
        onPerson: open,
        again: 'The candidates are for the science team. Sign in to see them.',
    });
}

/** @param {api.Person} person */
function open(person) {
    fillMasthead(person);
    show(byPart('join'), false);
    if (mayRank(person)) {
        void refresh();
        return;
    }
    byPart('trouble').replaceChildren(
        'The list of candidates is for the science team, and you are here as a reviewer. What ' +
            'your marks became part of stands under ',
        el('a', { href: '/record' }, 'My record'),
        '.'
    );
}

function wire() {
    const form = /** @type {HTMLFormElement} */ (byPart('filters'));
    byPart('sort').append(
        ...Object.entries(questions.SORTS).flatMap(([sort, { label }]) => [
            el('option', { value: sort }, `${label}, rising`),
            el('option', { value: `-${sort}` }, `${label}, falling`),
        ])
    );
    form.addEventListener('submit', (event) => {
        event.preventDefault();
        const given = new URLSearchParams(/** @type {any} */ (new FormData(form)));
        go(questions.questionOf(given.toString()));
    });
    form.addEventListener('reset', (event) => {
        event.preventDefault();
        go(questions.questionOf(''));
    });
    byPart('sort').addEventListener('change', () => form.requestSubmit());
    for (const name of ['first', 'back', 'next'])
        byPart(name).addEventListener('click', (event) => {
            if (event.ctrlKey || event.metaKey || event.shiftKey) return;
            event.preventDefault();
            const to = questions.questionOf(
                new URL(/** @type {HTMLAnchorElement} */ (byPart(name)).href).search
            );
            const pages = {
                first: [],
                back: before().slice(0, -1),
                next: [...before(), question.cursor],
            };
            go(to, pages[/** @type {'first' | 'back' | 'next'} */ (name)]);
            byPart('total').scrollIntoView();
        });
    addEventListener('popstate', () => {
        question = questions.questionOf(location.search);
        void refresh();
    });
    const run = /** @type {HTMLButtonElement} */ (byPart('run-now'));
    run.addEventListener('click', () => atWork(run, byPart('run-note'), runNow));
    watchInks(() => {
        for (const [canvas, row] of unseen)
            if (canvas.isConnected)
                void fillThumbnail(/** @type {HTMLCanvasElement} */ (canvas), row);
    });
}

async function start() {
    wire();
    try {
        const person = await api.whoAmI();
        if (person === null) askWho();
        else open(person);
    } catch (error) {
        say(byPart('trouble'), sentence(error));
    }
}

void start();
