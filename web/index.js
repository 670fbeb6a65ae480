/**
 * The first page: says what this is, and asks who is there. Whoever is known goes on to the Desk.
 */
import * as api from './api.js';
import { el, part as byPart, sentence } from './dom.js';
import { joinSheet } from './join-sheet.js';

const toDesk = () => location.replace('/desk');

async function start() {
    const place = byPart('join');
    try {
        if ((await api.whoAmI()) !== null) toDesk();
        else joinSheet(place, { onPerson: toDesk });
    } catch (error) {
        const again = el(
            'button',
            { type: 'button', onclick: () => location.reload() },
            'Try again'
        );
        place.replaceChildren(el('p', { class: 'trouble', role: 'alert' }, sentence(error)), again);
    }
}

void start();
