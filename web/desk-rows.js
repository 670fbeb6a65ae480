/** The marks as rows of a table, each field editable by keyboard. */
import { el, part as byPart } from './dom.js';
import * as format from './format.js';
import { preference, setPreference } from './preferences.js';

/** @typedef {import('./desk-model.js').DeskModel} DeskModel */
/** @typedef {import('./marks.js').Mark} Mark */
/** @typedef {'starts' | 'ends' | 'length' | 'depth'} Field */

const HOUR = 1 / 24;
const FIELDS = /** @type {const} */ (['starts', 'ends', 'length', 'depth']);

/**
 * What a typed value changes of a mark. The length moves its end, the depth its floor.
 * @param {Mark} mark @param {Field} field @param {number} value @param {format.DepthUnit} unit
 */
export function patchOf(mark, field, value, unit) {
    if (field === 'starts') return { starts: value };
    if (field === 'ends') return { ends: value };
    if (field === 'length') return { ends: mark.starts + value * HOUR };
    return { low: mark.high - value * (unit === '%' ? 0.01 : 1e-6) };
}

/**
 * Why a typed value cannot be, as a sentence; '' when it can.
 * @param {Mark} mark @param {Field} field @param {number} value
 * @param {import('./marks.js').Limits} limits
 */
export function refusal(mark, field, value, limits) {
    if (!Number.isFinite(value)) return 'This is not a number.';
    const [from, to] = [format.time(limits.starts), format.time(limits.ends)];
    if ((field === 'starts' || field === 'ends') && (value < limits.starts || value > limits.ends))
        return `The segment goes from day ${from} to ${to}.`;
    if (field === 'starts' && value >= mark.ends) return 'A mark starts before it ends.';
    if (field === 'ends' && value <= mark.starts) return 'A mark ends after it starts.';
    if (field === 'length' && value <= 0) return 'A mark is longer than nothing.';
    if (field === 'length' && mark.starts + value * HOUR > limits.ends)
        return `The segment ends on day ${to}.`;
    if (field === 'depth' && value < 0) return 'A depth is not negative.';
    return '';
}

/** @param {DeskModel} model */
export function makeRows(model) {
    const place = byPart('marks');
    const note = el('p', { class: 'trouble', role: 'alert' });
    const empty = el(
        'p',
        { class: 'empty' },
        'None yet. Drag on the chart to draw a box around a dip; if there is none, say “No dips ' +
            'here”.'
    );
    const body = el('tbody');
    const unitButton = el('button', { type: 'button', class: 'plain unit' });
    const depthHead = el('th', { scope: 'col', class: 'depth' }, 'Depth, ', unitButton);
    const table = el(
        'table',
        { class: 'tide' },
        el(
            'thead',
            {},
            el(
                'tr',
                {},
                el('th', { scope: 'col' }, 'No.'),
                el('th', { scope: 'col' }, 'Starts'),
                el('th', { scope: 'col' }, 'Ends'),
                el('th', { scope: 'col' }, 'Length, h'),
                depthHead,
                el('th', { scope: 'col' }, 'Sure?'),
                el('th', { scope: 'col' }, el('span', { class: 'unseen' }, 'Delete'))
            )
        ),
        body
    );
    place.replaceChildren(empty, table, note);
    /** @type {Map<number, {row: HTMLElement, fill: (mark: Mark) => void}>} */
    const rows = new Map();
    let unit = /** @type {format.DepthUnit} */ (preference('depth', '%') === 'ppm' ? 'ppm' : '%');

    unitButton.addEventListener('click', () => {
        unit = unit === '%' ? 'ppm' : '%';
        setPreference('depth', unit);
        fill();
    });

    /** @param {Mark} mark @param {Field} field */
    function textOf(mark, field) {
        if (field === 'length') return format.hours(mark.ends - mark.starts);
        if (field === 'depth') return format.depth(mark.high - mark.low, unit);
        return format.time(mark[field]);
    }

    /** @param {number} id */
    const markOf = (id) => model.work.said.marks.find((mark) => mark.id === id);

    /** @param {number} id @param {Field} field @param {HTMLInputElement} input */
    function take(id, field, input) {
        const mark = markOf(id);
        if (!mark || input.value === textOf(mark, field)) {
            note.textContent = '';
            input.removeAttribute('aria-invalid');
            return;
        }
        const value = format.typed(input.value);
        const why = refusal(mark, field, value, model.limits);
        note.textContent = why;
        if (why !== '') {
            input.setAttribute('aria-invalid', 'true');
            return;
        }
        input.removeAttribute('aria-invalid');
        model.change(id, patchOf(mark, field, value, unit));
        fill();
    }

    /**
     * One step of an arrow key in a field.
     * @param {Mark} mark
     * @param {Field} field
     * @param {number} way
     */
    function stepField(mark, field, way) {
        const days = way * model.nudgeStep(false);
        if (field === 'depth') {
            const by = (way * (model.range.f1 - model.range.f0)) / 200;
            model.change(mark.id, { low: Math.min(mark.low - by, mark.high) }, `step ${mark.id}`);
        } else model.nudge(mark.id, field === 'starts' ? 'starts' : 'ends', days);
    }

    /** @param {number} id @param {Field} field */
    function inputFor(id, field) {
        const input = el('input', {
            type: 'text',
            inputmode: 'decimal',
            autocomplete: 'off',
            spellcheck: 'false',
            size: field === 'starts' || field === 'ends' ? 10 : 7,
        });
        input.addEventListener('change', () => take(id, field, input));
        input.addEventListener('focus', () => model.choose(id));
        input.addEventListener('keydown', (event) => {
            const way = { ArrowUp: 1, ArrowDown: -1 }[event.key];
            const mark = markOf(id);
            if (event.key === 'Enter' && !event.ctrlKey && !event.metaKey) take(id, field, input);
            if (way === undefined || !mark) return;
            event.preventDefault();
            stepField(mark, field, way);
            const after = markOf(id);
            if (after) input.value = textOf(after, field);
        });
        return input;
    }

    /** @param {number} id */
    function makeRow(id) {
        const head = el('th', { scope: 'row' });
        const inputs = FIELDS.map((field) => inputFor(id, field));
        const certainty = el('button', {
            type: 'button',
            class: 'plain certainty',
            onclick: () => {
                const mark = markOf(id);
                if (mark)
                    model.change(id, { certainty: mark.certainty === 'sure' ? 'unsure' : 'sure' });
            },
        });
        const drop = el(
            'button',
            { type: 'button', class: 'plain drop', onclick: () => remove(id) },
            'Delete'
        );
        const row = el('tr', {}, head);
        const labels = ['Starts', 'Ends', 'Length, h', 'Depth'];
        inputs.forEach((input, at) => row.append(el('td', { 'data-label': labels[at] }, input)));
        row.append(el('td', { class: 'deed' }, certainty), el('td', { class: 'deed' }, drop));
        row.addEventListener('pointerdown', () => model.choose(id));
        return {
            row,
            /** @param {Mark} mark */
            fill(mark) {
                const name = model.nameOf(mark);
                head.textContent = name;
                row.classList.toggle('chosen', mark.id === model.work.chosen);
                FIELDS.forEach((field, at) => {
                    const [input, text] = [inputs[at], textOf(mark, field)];
                    const label =
                        field === 'depth'
                            ? `depth, ${unit}`
                            : field === 'length'
                              ? 'length, hours'
                              : field;
                    input.setAttribute('aria-label', `Mark ${name} ${label}`);
                    const editing =
                        document.activeElement === input && input.hasAttribute('aria-invalid');
                    if (!editing && input.value !== text) input.value = text;
                });
                certainty.textContent = mark.certainty;
                certainty.dataset.certainty = mark.certainty;
                const other = mark.certainty === 'sure' ? 'unsure' : 'sure';
                certainty.setAttribute(
                    'aria-label',
                    `Mark ${name} is ${mark.certainty}; make it ${other}`
                );
                drop.setAttribute('aria-label', `Delete mark ${name}`);
            },
        };
    }

    /** @param {number} id */
    function remove(id) {
        model.remove(id);
        note.textContent = '';
        const next = body.querySelector('button.drop') ?? byPart('strip');
        /** @type {HTMLElement} */ (next).focus();
    }

    function fill() {
        const marks = model.work.said.marks;
        empty.hidden = marks.length > 0;
        table.hidden = marks.length === 0;
        unitButton.textContent = unit;
        unitButton.setAttribute('aria-label', `in ${unit}; show in ${unit === '%' ? 'ppm' : '%'}`);
        const here = new Set(marks.map((mark) => mark.id));
        for (const [id, { row }] of rows)
            if (!here.has(id)) {
                row.remove();
                rows.delete(id);
            }
        marks.forEach((mark, at) => {
            const one = rows.get(mark.id) ?? makeRow(mark.id);
            rows.set(mark.id, one);
            if (body.children[at] !== one.row) moveTo(one.row, at);
            one.fill(mark);
        });
        if (marks.length === 0) note.textContent = '';
    }

    /**
     * Puts a row in its place without taking the focus from it.
     * @param {HTMLElement} row
     * @param {number} at
     */
    function moveTo(row, at) {
        const focused = row.contains(document.activeElement) ? document.activeElement : null;
        body.insertBefore(row, body.children[at] ?? null);
        if (focused instanceof HTMLElement) focused.focus();
    }

    return { fill };
}
