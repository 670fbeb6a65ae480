/** My record: what one reviewer did, what came of it, and their own settings. */
import * as api from './api.js';
import { atWork, el, part as byPart, say, sentence, show } from './dom.js';
import * as format from './format.js';
import { joinSheet } from './join-sheet.js';
import { fillMasthead } from './masthead.js';
import { browserStorage } from './queue-storage.js';
import * as keptWork from './desk-kept.js';
import { asideSentence, markSentence, skillSentence } from './record-words.js';

const PAGE = 50;
const storage = browserStorage();
/** @type {api.Person | null} */
let person = null;

/** @param {string} name @returns {HTMLButtonElement} */
const button = (name) => /** @type {HTMLButtonElement} */ (byPart(name));

/**
 * @param {{looks: number, marks: number, days_looked: number, first: string | null, last: string |
 * null}} totals
 */
function fillTotals(totals) {
    /** @type {[string, string][]} */
    const pairs = [
        ['Looks', format.whole(totals.looks)],
        ['Marks', format.whole(totals.marks)],
        ['Days of starlight', format.fixed(totals.days_looked, 1)],
        ['First', totals.first === null ? '–' : format.day(totals.first)],
        ['Last', totals.last === null ? '–' : format.day(totals.last)],
    ];
    byPart('totals').replaceChildren(
        ...pairs.map(([name, value]) => el('div', {}, el('dt', {}, name), el('dd', {}, value)))
    );
}

/**
 * @param {{candidate: number, star: string, mid_time: number, time_reference?: string, probability:
 * number}[]} touched
 */
function fillTouched(touched) {
    show(byPart('touched'), touched.length > 0);
    show(byPart('touched-none'), touched.length === 0);
    byPart('touched-rows').replaceChildren(
        ...touched.map((one) =>
            el(
                'tr',
                {},
                el('th', { scope: 'row' }, String(one.candidate)),
                el('td', { class: 'text' }, one.star),
                el('td', { title: one.time_reference ?? '' }, format.time(one.mid_time)),
                el('td', {}, format.probability(one.probability))
            )
        )
    );
}

/** @param {any} review */
function reviewRow(review) {
    const { segment, marks, conditions } = review;
    const said = el('td', { class: 'text' });
    if (marks.length === 0) said.append('No dips');
    else said.append(el('ul', { class: 'plain-list' }, ...marks.map(markItem)));
    const aside = asideSentence(conditions, review.late);
    if (aside !== '') said.append(el('p', { class: 'aside' }, aside));
    return el(
        'tr',
        {},
        el('th', { scope: 'row' }, String(review.review)),
        el('td', { class: 'text' }, format.moment(review.submitted)),
        el(
            'td',
            { class: 'text', title: segment.time_reference },
            `${format.fixed(segment.starts, 2)} to ${format.fixed(segment.ends, 2)}`
        ),
        said
    );
}

/** @param {any} mark */
const markItem = (mark) => el('li', {}, markSentence(mark));

/** @param {any} record @param {boolean} first */
function fillReviews(record, first) {
    const rows = record.reviews.map(reviewRow);
    if (first) byPart('review-rows').replaceChildren(...rows);
    else byPart('review-rows').append(...rows);
    const some = byPart('review-rows').children.length > 0;
    show(byPart('reviews'), some);
    show(byPart('reviews-none'), !some);
    show(byPart('earlier'), record.next !== null);
    button('earlier').dataset.cursor = record.next ?? '';
}

/** @param {api.Person} me */
function fillMe(me) {
    person = me;
    fillMasthead(me);
    const since = `since ${format.day(me.joined)}`;
    say(
        byPart('me'),
        me.guest
            ? `You are ${me.handle}, a guest ${since}, tied to this browser. Choose a ` +
                  'passphrase to come back from anywhere.'
            : `You are ${me.handle}, here ${since}.`
    );
    /** @type {HTMLInputElement} */ (byPart('credit')).checked = me.credit;
    /** @type {HTMLInputElement} */ (byPart('username')).value = me.handle;
    say(byPart('passphrase-title'), me.guest ? 'Choose a passphrase' : 'Change the passphrase');
}

async function fillWaiting() {
    const waiting = await storage.all().catch(() => []);
    const mine = waiting.filter((item) => item.person === person?.person);
    show(byPart('waiting-here'), mine.length > 0);
    say(
        byPart('waiting-here'),
        `${format.counted(mine.length, 'review')} waiting in this browser; the Desk sends what ` +
            'waits.'
    );
}

/** @param {api.Person} me */
async function fill(me) {
    fillMe(me);
    const record = await api.myRecord({ limit: PAGE });
    fillTotals(record.totals);
    say(byPart('skill'), skillSentence(record.skill));
    say(byPart('caution'), record.caution);
    fillTouched(record.candidates);
    fillReviews(record, true);
    await fillWaiting();
    show(byPart('join'), false);
    show(byPart('record'), true);
}

function askWho() {
    fillMasthead(null);
    show(byPart('record'), false);
    show(byPart('join'), true);
    joinSheet(byPart('join'), { onPerson: (me) => void open(me) });
}

/** @param {api.Person} me */
async function open(me) {
    try {
        await fill(me);
    } catch (error) {
        if (error instanceof api.Problem && error.status === 401) askWho();
        else say(byPart('trouble'), sentence(error));
    }
}

/**
 * Asks before a step that cannot be taken back.
 * @param {{title: string, text: string, yes: string, act: () => Promise<void>}} question
 */
function ask({ title, text, yes, act }) {
    const dialog = /** @type {HTMLDialogElement} */ (byPart('sure'));
    say(byPart('sure-title'), title);
    say(byPart('sure-text'), text);
    say(byPart('sure-yes'), yes);
    say(byPart('sure-trouble'), '');
    button('sure-yes').onclick = () => atWork(button('sure-yes'), byPart('sure-trouble'), act);
    button('sure-no').onclick = () => dialog.close();
    dialog.showModal();
}

/** What this browser keeps of the person goes with them. */
async function forgetHere() {
    keptWork.forget();
    for (const item of await storage.all().catch(() => []))
        if (item.person === person?.person) await storage.remove(item.key);
}

async function signOut() {
    await api.signOut();
    keptWork.forget();
    location.assign('/');
}

async function leave() {
    await forgetHere();
    await api.leave();
    location.assign('/');
}

function wire() {
    const credit = /** @type {HTMLInputElement} */ (byPart('credit'));
    credit.addEventListener('change', async () => {
        say(byPart('credit-trouble'), '');
        try {
            fillMe(await api.changeMe({ credit: credit.checked }));
        } catch (error) {
            credit.checked = !credit.checked;
            say(byPart('credit-trouble'), sentence(error));
        }
    });
    byPart('passphrase-form').addEventListener('submit', (event) => {
        event.preventDefault();
        const input = /** @type {HTMLInputElement} */ (byPart('passphrase'));
        say(byPart('passphrase-note'), '');
        void atWork(button('passphrase-set'), byPart('passphrase-trouble'), async () => {
            fillMe(await api.changeMe({ passphrase: input.value }));
            input.value = '';
            say(
                byPart('passphrase-note'),
                'It is set. Sign in with your handle and this passphrase.'
            );
        });
    });
    byPart('earlier').addEventListener('click', () =>
        atWork(button('earlier'), byPart('earlier-trouble'), async () =>
            fillReviews(
                await api.myRecord({ limit: PAGE, cursor: button('earlier').dataset.cursor }),
                false
            )
        )
    );
    byPart('sign-out').addEventListener('click', () => {
        if (!person?.guest) return void atWork(button('sign-out'), byPart('door-trouble'), signOut);
        ask({
            title: 'Sign out as a guest?',
            text:
                'A guest has no passphrase, so nobody can sign in as this guest again. Your ' +
                'reviews stay. To come back as the same person, choose a passphrase first.',
            yes: 'Sign out',
            act: signOut,
        });
    });
    byPart('leave').addEventListener('click', () =>
        ask({
            title: 'Leave and be forgotten?',
            text:
                'Your handle and passphrase are removed, and everything that this browser ' +
                'keeps of you. Your reviews stay, without your handle. This cannot be taken ' +
                'back.',
            yes: 'Leave and be forgotten',
            act: leave,
        })
    );
}

async function start() {
    wire();
    try {
        const me = await api.whoAmI();
        if (me === null) askWho();
        else await fill(me);
    } catch (error) {
        say(byPart('trouble'), sentence(error));
    }
}

void start();
