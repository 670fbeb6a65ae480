/** The head of every page: its links, and who is signed in. */
import * as api from './api.js';
import { part, say, show } from './dom.js';

/** @param {api.Person | null} person */
export function mayRank(person) {
    return person !== null && (person.role === 'science' || person.role === 'admin');
}

/** @param {api.Person | null} person */
export function fillMasthead(person) {
    show(part('to-record'), person !== null);
    show(part('to-candidates'), mayRank(person));
    say(part('who'), person === null ? '' : person.handle + (person.guest ? ' (guest)' : ''));
}
