/** The keys of the Desk: on the chart, and anywhere. */
import { part as byPart } from './dom.js';
import * as format from './format.js';
import { preference } from './preferences.js';

/** @typedef {import('./desk-model.js').DeskModel} DeskModel */

/**
 * @param {DeskModel} model
 * @param {object} acts
 * @param {(text: string) => void} acts.spoken
 * @param {() => void} acts.finish @param {() => void} acts.help @param {() => void} acts.toggleView
 */
export function makeKeys(model, acts) {
    const strip = byPart('strip');

    /** Says where the cursor is. */
    const sayCursor = () => acts.spoken(model.describe(model.cursor.time));

    /** @param {KeyboardEvent} event */
    function arrow(event) {
        const small = Math.max(1 / 200, model.step / (model.span.t1 - model.span.t0));
        const share = event.shiftKey ? 1 / 20 : small;
        model.moveCursor(event.key === 'ArrowLeft' ? -share : share);
        sayCursor();
    }

    function beginOrEnd() {
        const done = model.beginOrEnd();
        const mark = model.chosen;
        if (done === 'begun') acts.spoken(`Mark begun at day ${format.time(model.cursor.time)}.`);
        else if (done === 'full')
            acts.spoken(`There may be at most ${model.limits.marksMost} marks.`);
        else if (mark) {
            const length = format.hours(mark.ends - mark.starts);
            acts.spoken(`Mark ${model.nameOf(mark)} made, ${length} hours long.`);
        }
    }

    function escape() {
        const begun = model.begun !== null;
        model.dropDraft();
        model.choose(null);
        if (begun) acts.spoken('The mark that was begun is dropped.');
    }

    function removeChosen() {
        const mark = model.chosen;
        if (!mark) return;
        const name = model.nameOf(mark);
        model.remove(mark.id);
        acts.spoken(`Mark ${name} deleted.`);
    }

    function toggleCertainty() {
        const mark = model.chosen;
        if (!mark) return;
        const certainty = mark.certainty === 'sure' ? 'unsure' : 'sure';
        model.change(mark.id, { certainty });
        acts.spoken(`Mark ${model.nameOf(mark)} is ${certainty}.`);
    }

    /** @param {number} time */
    function go(time) {
        model.setCursorByKeys(time);
        sayCursor();
    }

    /** @type {Record<string, (event: KeyboardEvent) => void>} */
    const onChart = {
        ArrowLeft: arrow,
        ArrowRight: arrow,
        ArrowUp: () => model.zoom(1.25),
        ArrowDown: () => model.zoom(0.8),
        Home: () => go(model.whole.t0),
        End: () => go(model.whole.t1),
        PageUp: () => go(model.cursor.time - (model.span.t1 - model.span.t0)),
        PageDown: () => go(model.cursor.time + (model.span.t1 - model.span.t0)),
        Enter: beginOrEnd,
        m: beginOrEnd,
        Escape: escape,
        Delete: removeChosen,
        Backspace: removeChosen,
        s: toggleCertainty,
        '+': () => model.zoom(1.5),
        '=': () => model.zoom(1.5),
        '-': () => model.zoom(1 / 1.5),
        0: () => model.setSpan(model.whole),
        '[': () => model.stretch(0.8),
        ']': () => model.stretch(1.25),
        f: () => model.setFit(!model.fit),
        t: acts.toggleView,
    };

    /** @param {KeyboardEvent} event */
    function chartKey(event) {
        if (model.sheet === null || event.ctrlKey || event.metaKey || event.altKey) return;
        const key = event.key.length === 1 ? event.key.toLowerCase() : event.key;
        const act = onChart[key];
        if (!act) return;
        event.preventDefault();
        act(event);
    }

    strip.addEventListener('keydown', (event) => {
        if (event.target === strip) chartKey(event);
    });

    /** @param {EventTarget | null} target does it take text itself? */
    const takesText = (target) =>
        target instanceof HTMLElement &&
        target.matches('input:not([type="checkbox"]), textarea, select');

    document.addEventListener('keydown', (event) => {
        if (document.querySelector('dialog[open]') !== null) return;
        const control = event.ctrlKey || event.metaKey;
        if (event.key === '?' && !control && !takesText(event.target)) {
            const onStrip = event.target instanceof Node && strip.contains(event.target);
            if (!onStrip && preference('single-key', 'on') !== 'on') return;
            event.preventDefault();
            acts.help();
        } else if (model.sheet === null) return;
        else if (control && event.key === 'Enter') {
            event.preventDefault();
            acts.finish();
        } else if (control && !takesText(event.target) && event.key.toLowerCase() === 'z') {
            event.preventDefault();
            if (event.shiftKey) model.redo();
            else model.undo();
        } else if (control && !takesText(event.target) && event.key.toLowerCase() === 'y') {
            event.preventDefault();
            model.redo();
        }
    });

    return { chartKey };
}
