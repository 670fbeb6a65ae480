/** "1 waiting to send": the note in the masthead and the sheet behind it. */
import { el, part as byPart, say, show } from './dom.js';
import * as format from './format.js';

/** @typedef {import('./queue.js').State} State */
/** @typedef {import('./queue.js').Waiting} Waiting */

/** @param {State} state @param {number} now ms */
export function outboxSentence(state, now) {
    const loss = state.kept
        ? ''
        : ' This browser keeps nothing: leave this page open until they are sent.';
    if (state.waiting.length === 0) return `Everything is sent.${loss}`;
    if (state.signInNeeded) return `The server asks you to sign in again.${loss}`;
    if (state.sending) return `Sending.${loss}`;
    const why = state.trouble === '' ? '' : `${state.trouble} `;
    if (state.nextTry === null)
        return `${why}They are sent when their reviewer is signed in.${loss}`;
    const seconds = Math.max(1, Math.ceil((state.nextTry - now) / 1000));
    return `${why}Trying again in ${format.counted(seconds, 'second')}.${loss}`;
}

/** @param {() => import('./queue.js').Queue} queue */
export function makeOutbox(queue) {
    const note = /** @type {HTMLButtonElement} */ (byPart('waiting'));
    const dialog = /** @type {HTMLDialogElement} */ (byPart('outbox'));
    const list = byPart('outbox-list');
    /** @type {number | undefined} */
    let clock;

    note.addEventListener('click', () => {
        dialog.showModal();
        fill(queue().state());
    });
    byPart('try-now').addEventListener('click', () => queue().tryNow());
    dialog.addEventListener('close', () => clearInterval(clock));

    /** @param {Waiting} item */
    function row(item) {
        const { starts, ends } = item.segment;
        const span = `Days ${format.fixed(starts, 2)} to ${format.fixed(ends, 2)}`;
        const drop = el('button', { type: 'button', class: 'plain' }, 'Discard');
        drop.setAttribute('aria-label', `Discard the review of ${span}`);
        drop.addEventListener('click', () => void queue().discard(item.key));
        return el('li', {}, `${span}, by ${item.handle} `, drop);
    }

    /** @param {State} state */
    function fill(state) {
        say(byPart('outbox-text'), outboxSentence(state, Date.now()));
        clearInterval(clock);
        if (!dialog.open) return;
        list.replaceChildren(...state.waiting.map(row));
        clock = window.setInterval(
            () => say(byPart('outbox-text'), outboxSentence(queue().state(), Date.now())),
            1000
        );
    }

    return {
        /** @param {State} state */
        show(state) {
            const many = state.waiting.length;
            show(note, many > 0);
            say(note, `${format.whole(many)} waiting to send`);
            fill(state);
        },
    };
}
