/** The sheet that asks who is there: join, sign in, or look around as a guest. */
import * as api from './api.js';
import { atWork, el, say } from './dom.js';

const PASSPHRASE_LEAST = 10;

/**
 * @param {string} label @param {import('./dom.js').Props} props @param {string} [hint]
 * @returns {{row: HTMLElement, input: HTMLInputElement}}
 */
function field(label, props, hint) {
    const input = el('input', { type: 'text', ...props });
    const row = el('label', { class: 'field' }, el('span', {}, label), input);
    if (hint) row.append(el('small', {}, hint));
    return { row, input };
}

/** What a joining person is told about what is kept. */
export function whatIsKept() {
    return el(
        'section',
        { class: 'kept' },
        el('h3', {}, 'What is kept of you'),
        el(
            'ul',
            {},
            el('li', {}, 'A handle. Choose one that is not your real name.'),
            el('li', {}, 'Your reviews: marks, conditions, when, and how long you looked.'),
            el('li', {}, 'Your passphrase, only as a scrambled form that cannot be read back.'),
            el('li', {}, 'In this browser: a sign-in cookie, and reviews that wait to be sent.')
        ),
        el(
            'p',
            {},
            'No e-mail, no name, no age, no place; nothing goes to other sites. Your handle is ' +
                'not ',
            'published unless you ask for credit under My record. You can leave there at any ',
            'time: your handle is then removed, and your reviews stay without it.'
        )
    );
}

/**
 * @param {string} title @param {string} action @param {boolean} isNew
 * @param {(handle: string, passphrase: string) => Promise<api.Person>} act
 * @param {(person: api.Person) => void} onPerson
 * @param {string} [handle] filled in already
 */
function form(title, action, isNew, act, onPerson, handle = '') {
    const name = field(
        'Handle',
        {
            name: 'handle',
            autocomplete: 'username',
            required: true,
            maxlength: 32,
            autocapitalize: 'none',
            spellcheck: 'false',
            value: handle,
        },
        isNew ? 'Up to 32 characters; not your real name.' : ''
    );
    const pass = field(
        'Passphrase',
        {
            name: 'passphrase',
            type: 'password',
            autocomplete: isNew ? 'new-password' : 'current-password',
            required: true,
            maxlength: 512,
            minlength: isNew ? PASSPHRASE_LEAST : null,
        },
        isNew ? `At least ${PASSPHRASE_LEAST} characters. It cannot be recovered.` : ''
    );
    const note = el('p', { class: 'trouble', role: 'alert' });
    const button = el('button', { type: 'submit', class: 'chief' }, action);
    return el(
        'form',
        {
            class: 'way',
            onsubmit: (/** @type {Event} */ event) => {
                event.preventDefault();
                void atWork(button, note, async () =>
                    onPerson(await act(name.input.value.trim(), pass.input.value))
                );
            },
        },
        el('h3', {}, title),
        name.row,
        pass.row,
        note,
        button
    );
}

/**
 * Fills `place` with the sheet and calls onPerson once somebody is there.
 * @param {HTMLElement} place
 * @param {{onPerson: (person: api.Person) => void, again?: string, handle?: string}} options
 * `again`:
 *     why somebody who was signed in has to do it again
 */
export function joinSheet(place, { onPerson, again = '', handle = '' }) {
    const note = el('p', { class: 'trouble', role: 'alert' });
    const guest = el('button', { type: 'button' }, 'Look around as a guest');
    guest.addEventListener('click', () =>
        atWork(guest, note, async () => onPerson(await api.joinAsGuest()))
    );
    const enter = form('Sign in', 'Sign in', false, api.signIn, onPerson, handle);
    if (again !== '') {
        place.replaceChildren(el('p', { role: 'status' }, again), enter);
        return;
    }
    const join = form('Join', 'Join', true, api.join, onPerson);
    const around = el(
        'div',
        { class: 'way' },
        el('h3', {}, 'Guest'),
        el(
            'p',
            {},
            'You get an invented handle, tied to this browser. Your reviews count like anybody ',
            'else’s, and you can choose a passphrase later to keep them.'
        ),
        note,
        guest
    );
    place.replaceChildren(el('div', { class: 'ways' }, join, enter, around), whatIsKept());
    say(note, '');
}
