/** The Desk: takes segments, shows them, sends what the reviewer says of them. */
import * as api from './api.js';
import { makeEdges } from './desk-edges.js';
import { makeKeys } from './desk-keys.js';
import * as keptWork from './desk-kept.js';
import { DeskModel } from './desk-model.js';
import { makeOverview } from './desk-overview.js';
import { makeRows } from './desk-rows.js';
import { showControl, showSlip } from './desk-slip.js';
import { makeStrip, shownMarks } from './desk-strip.js';
import { el, part as byPart, say, sentence, show } from './dom.js';
import { drawLoupe, loupeView } from './draw-loupe.js';
import * as format from './format.js';
import { newKey } from './idempotency-key.js';
import { joinSheet } from './join-sheet.js';
import { CONDITIONS, reviewBody } from './marks.js';
import { fillMasthead } from './masthead.js';
import { makeOutbox } from './outbox.js';
import { inksNow, paperOf, watchInks } from './paper.js';
import { preference, setPreference } from './preferences.js';
import { browserStorage } from './queue-storage.js';
import { makeQueue } from './queue.js';
import { makeStopwatch } from './stopwatch.js';
import { makeSupply } from './supply.js';

/** @typedef {import('./supply.js').Sheet} Sheet */

const SENT_KEPT = 4;
const AGAIN_MS = 10_000;

/** @type {api.Person | null} */
let person = null;
let inks = inksNow();
/**
 * Segments sent but not answered yet, to show a control with.
 * @type {Map<string, import('./desk-slip.js').Sent>}
 */
const sent = new Map();
/** @type {number | undefined} */
let againTimer;

const stopwatch = makeStopwatch(() => performance.now());
const supply = makeSupply({
    takeLease: api.takeLease,
    segmentFlux: api.segmentFlux,
    now: () => Date.now(),
});

// ---- drawing, only when something changed ----

const due = new Set();
/** @param {('base' | 'marks' | 'overview' | 'loupe')[]} what */
function redraw(...what) {
    if (due.size === 0) requestAnimationFrame(drawDue);
    for (const one of what) due.add(one);
}

function drawDue() {
    const now = new Set(due);
    due.clear();
    if (model.sheet === null) return;
    if (now.has('base')) strip.drawBase(inks);
    if (now.has('marks')) {
        strip.drawMarks(inks);
        edges.place();
    }
    if (now.has('overview')) overview.draw(inks);
    if (now.has('loupe')) drawLoupeNow();
}

function drawLoupeNow() {
    const canvas = /** @type {HTMLCanvasElement} */ (byPart('loupe'));
    const { width, height } = canvas.getBoundingClientRect();
    const paper = paperOf(canvas, width, height);
    const point = model.pointAt(model.cursor.time);
    if (paper !== null) {
        const scale = (model.span.t1 - model.span.t0) / strip.plot().width;
        const { time } = model.cursor;
        const view = loupeView(model.curve, model.whole, time, scale, width, 12 * model.step);
        const flux = model.cursor.flux ?? point?.flux ?? null;
        drawLoupe(paper, inks, model.curve, view, { time, flux }, shownMarks(model));
    }
    const flux = point === null ? 'no points' : `flux ${format.flux(point.flux)}`;
    say(byPart('reading'), `day ${format.time(model.cursor.time)} · ${flux}`);
}

// ---- the parts of the sheet ----

const model = new DeskModel(changed);
const strip = makeStrip(model, { spoken });
const overview = makeOverview(model);
const rows = makeRows(model);
const keys = makeKeys(model, { spoken, finish, help: openHelp, toggleView });
const edges = makeEdges(model, { plot: strip.plot, onKey: (event) => keys.chartKey(event) });
const outbox = makeOutbox(() => queue);
const queue = makeQueue({
    storage: browserStorage(),
    send: api.sendReview,
    now: () => Date.now(),
    setTimer: (run, ms) => setTimeout(run, ms),
    clearTimer: (timer) => clearTimeout(timer),
    random: Math.random,
    onChange: queueChanged,
    onSent: reviewSent,
    onRefused: (item, problem) => {
        sent.delete(item.key);
        const { starts, ends } = item.segment;
        const span = `days ${format.fixed(starts, 2)} to ${format.fixed(ends, 2)}`;
        showSlip(`Your review of ${span} was not taken. ${problem.message}`);
    },
});

/** @param {import('./desk-model.js').Change} what */
function changed(what) {
    if (what === 'sheet') fillSheet();
    if (what === 'sheet' || what === 'window') {
        redraw('base', 'marks', 'overview', 'loupe');
        fillTools();
    }
    if (what === 'work' || what === 'sheet') {
        redraw('marks', 'overview', 'loupe');
        rows.fill();
        edges.fill();
        fillFinish();
        keepUnfinished();
    }
    if (what === 'cursor') redraw('marks', 'loupe');
}

function fillSheet() {
    show(byPart('sheet'), model.sheet !== null);
    if (model.sheet === null) return;
    const { segment } = model.sheet.lease;
    const span = `Days ${format.fixed(segment.starts, 2)} to ${format.fixed(segment.ends, 2)}`;
    say(byPart('title'), span);
    byPart('sheet').dataset.segment = segment.id;
    say(
        byPart('subtitle'),
        `${format.counted(model.curve.times.length, 'point')} · ` +
            `${format.axis(segment.time_reference)}`
    );
    say(byPart('trouble'), '');
    byPart('strip').setAttribute('aria-label', `Flux against time, ${span.toLowerCase()}`);
    measure();
}

function fillTools() {
    for (const view of ['as_measured', 'trend_removed'])
        byPart(`view-${view}`).setAttribute('aria-pressed', String(view === model.fluxView));
    byPart('fit-flux').setAttribute('aria-pressed', String(model.fit));
    const whole = model.span.t0 === model.whole.t0 && model.span.t1 === model.whole.t1;
    for (const name of ['zoom-out', 'pan-left', 'pan-right', 'show-whole'])
        setOff(byPart(name), whole);
}

function fillFinish() {
    const { marks, conditions } = model.work.said;
    for (const { name } of CONDITIONS)
        byPart(`condition-${name}`).setAttribute('aria-pressed', String(conditions.includes(name)));
    setOff(byPart('no-dips'), marks.length > 0);
    setOff(byPart('send'), marks.length === 0);
    say(byPart('send'), marks.length < 2 ? 'Send marks' : `Send ${marks.length} marks`);
    setOff(byPart('undo'), model.work.past.length === 0);
    setOff(byPart('redo'), model.work.future.length === 0);
}

/**
 * Out of use, but still there for the keyboard.
 * @param {HTMLElement} button
 * @param {boolean} off
 */
function setOff(button, off) {
    if (off) button.setAttribute('aria-disabled', 'true');
    else button.removeAttribute('aria-disabled');
}

/** @param {string} name @param {() => void} act */
function onPress(name, act) {
    const button = byPart(name);
    button.addEventListener('click', () => {
        if (button.getAttribute('aria-disabled') !== 'true') act();
    });
}

function keepUnfinished() {
    if (model.sheet === null || person === null) return;
    keptWork.keep({
        person: person.person,
        lease: model.sheet.lease,
        said: model.work.said,
        seconds: stopwatch.seconds(),
    });
}

/** Takes the sizes of the papers and of the text, and draws anew. */
function measure() {
    inks = inksNow();
    const chart = byPart('strip').getBoundingClientRect();
    const whole = byPart('overview').getBoundingClientRect();
    strip.setSize(chart.width, chart.height);
    overview.setSize(whole.width, whole.height);
    redraw('base', 'marks', 'overview', 'loupe');
}

/** @type {number | undefined} */
let speech;
/** Spoken once things have come to rest, so that a held key is not read out step by step.
 * @param {string} text */
function spoken(text) {
    clearTimeout(speech);
    speech = window.setTimeout(() => say(byPart('spoken'), text), 150);
}

// ---- going from segment to segment ----

/**
 * What is on the page: the welcome, the sheet, or the calm sheet.
 * @param {'welcome' | 'sheet' | 'calm'} which
 */
function turnTo(which) {
    show(byPart('welcome'), which === 'welcome');
    show(byPart('calm'), which === 'calm');
    show(byPart('sheet'), which === 'sheet' && model.sheet !== null);
    /* What is to be said of the segment before is said on whatever comes after it. */
    if (which !== 'welcome') byPart(which === 'calm' ? 'calm' : 'finish').append(byPart('slip'));
}

/** What the calm sheet's button does. @type {() => void} */
let calmAct = () => undefined;

/** @param {string} title @param {string} text @param {string} action @param {() => void} act */
function calm(title, text, action, act) {
    model.close();
    calmAct = act;
    say(byPart('calm-title'), title);
    say(byPart('calm-text'), text);
    say(byPart('look-again'), action);
    turnTo('calm');
    byPart('calm-title').focus();
}

async function next() {
    clearTimeout(againTimer);
    try {
        const sheet = await supply.take();
        if (sheet === null) {
            keptWork.forget();
            calm(
                'Nothing is left to look at',
                'You have seen every segment that needs you now. More may come as others finish ' +
                    'theirs, or when new stars are loaded.',
                'Look again',
                () => void next()
            );
            return;
        }
        showSheet(sheet);
    } catch (error) {
        takeFailed(error);
    }
}

/** @param {unknown} error */
function takeFailed(error) {
    if (error instanceof api.Problem && error.status === 401) {
        welcome();
        return;
    }
    calm('The next segment could not be fetched', sentence(error), 'Try again', () => void next());
    const passing =
        error instanceof api.Unreached ||
        (error instanceof api.Problem && (error.status >= 500 || error.status === 429));
    if (!passing) return;
    const wait = error instanceof api.Problem ? (error.retryAfterMs ?? AGAIN_MS) : AGAIN_MS;
    againTimer = window.setTimeout(() => void next(), Math.max(wait, 1000));
}

/** @param {Sheet} sheet @param {{said: unknown, seconds: number}} [kept] */
function showSheet(sheet, kept) {
    const elsewhere = document.activeElement?.closest('dialog, .masthead') ?? null;
    byPart('sheet').hidden = false;
    stopwatch.restart(kept?.seconds ?? 0);
    stopwatch.setSeen(document.visibilityState === 'visible');
    model.open(sheet, kept?.said);
    turnTo('sheet');
    measure();
    if (elsewhere === null) byPart('strip').focus();
    supply.prepare();
}

function finish() {
    if (model.sheet === null || person === null) return;
    const { lease } = model.sheet;
    const { segment } = lease;
    const said = model.work.said;
    const item = {
        key: newKey(),
        person: person.person,
        handle: person.handle,
        since: Date.now(),
        body: reviewBody(said, lease.lease, stopwatch.seconds()),
        segment: {
            starts: segment.starts,
            ends: segment.ends,
            time_reference: segment.time_reference,
        },
    };
    sent.set(item.key, { sheet: model.sheet, said });
    for (const key of [...sent.keys()].slice(0, -SENT_KEPT)) sent.delete(key);
    byPart('slip').hidden = true;
    keptWork.forget();
    model.sheet = null;
    void queue.add(item);
    spoken(
        said.marks.length === 0
            ? 'No dips here: done.'
            : `${format.counted(said.marks.length, 'mark')} handed in.`
    );
    void next();
}

/**
 * @param {import('./queue.js').Waiting} item
 * @param {{review: number, late: boolean, control?: api.Control}} answer
 */
function reviewSent(item, answer) {
    const what = sent.get(item.key);
    sent.delete(item.key);
    if (answer.control) showControl(answer.control, what);
    else if (answer.late) showSlip('Your last review came after its time, and was still taken.');
}

// ---- who is there ----

/** @param {import('./queue.js').State} state */
function queueChanged(state) {
    outbox.show(state);
    const dialog = /** @type {HTMLDialogElement} */ (byPart('again'));
    if (!state.signInNeeded || dialog.open || person === null) return;
    joinSheet(byPart('again-place'), {
        again: person.guest
            ? 'The server no longer knows this guest. What waits can be sent only by the one ' +
              'who looked.'
            : `The server no longer knows this browser. Sign in as ${person.handle}, and what ` +
              'waits is sent.',
        handle: person.handle,
        onPerson: (back) => {
            dialog.close();
            signedIn(back);
        },
    });
    dialog.showModal();
}

function welcome() {
    person = null;
    queue.setPerson(null);
    model.close();
    fillMasthead(null);
    joinSheet(byPart('join'), { onPerson: signedIn });
    turnTo('welcome');
}

/** @param {api.Person} who */
function signedIn(who) {
    const same = person?.person === who.person;
    person = who;
    fillMasthead(who);
    queue.setPerson(who.person);
    if (same && model.sheet !== null) return;
    supply.drop();
    byPart('welcome').hidden = true;
    void begin(who);
}

/** The unfinished segment from before a reload, or the next. @param {api.Person} who */
async function begin(who) {
    const kept = keptWork.kept(who.person, Date.now());
    if (kept === null) {
        await next();
        return;
    }
    try {
        showSheet(await supply.sheetOf(kept.lease), kept);
    } catch (error) {
        if (error instanceof api.Unreached) takeFailed(error);
        else await next();
    }
}

// ---- help, theme, wiring ----

function openHelp() {
    /** @type {HTMLDialogElement} */ (byPart('help')).showModal();
}

function toggleView() {
    model.setFluxView(model.fluxView === 'as_measured' ? 'trend_removed' : 'as_measured');
    spoken(model.fluxView === 'as_measured' ? 'As measured.' : 'Trend removed.');
}

function wire() {
    byPart('conditions').append(
        ...CONDITIONS.map(({ name, label }) =>
            el(
                'button',
                {
                    type: 'button',
                    'data-part': `condition-${name}`,
                    'aria-pressed': 'false',
                    onclick: () => model.toggleCondition(name),
                },
                label
            )
        )
    );
    onPress('view-as_measured', () => model.setFluxView('as_measured'));
    onPress('view-trend_removed', () => model.setFluxView('trend_removed'));
    onPress('zoom-in', () => model.zoom(1.6));
    onPress('zoom-out', () => model.zoom(1 / 1.6));
    onPress('pan-left', () => model.pan(-0.4));
    onPress('pan-right', () => model.pan(0.4));
    onPress('show-whole', () => model.setSpan(model.whole));
    onPress('fit-flux', () => model.setFit(!model.fit));
    onPress('undo', () => model.undo());
    onPress('redo', () => model.redo());
    onPress('no-dips', finish);
    onPress('send', finish);
    onPress('look-again', () => calmAct());
    onPress('help-open', openHelp);
    const single = /** @type {HTMLInputElement} */ (byPart('single-key'));
    single.checked = preference('single-key', 'on') === 'on';
    single.addEventListener('change', () =>
        setPreference('single-key', single.checked ? 'on' : 'off')
    );
    const strip = byPart('strip');
    strip.addEventListener('focus', () => redraw('marks'));
    strip.addEventListener('blur', () => redraw('marks'));
    new ResizeObserver(measure).observe(strip);
    watchInks(() => {
        inks = inksNow();
        redraw('base', 'marks', 'overview', 'loupe');
        /* A printer does not wait for the next frame. */
        drawDue();
    });
    document.addEventListener('visibilitychange', () => {
        stopwatch.setSeen(document.visibilityState === 'visible');
        keepUnfinished();
    });
    addEventListener('online', () => {
        queue.tryNow();
        if (!byPart('calm').hidden && againTimer !== undefined) void next();
    });
}

async function start() {
    wire();
    await queue.open();
    try {
        const who = await api.whoAmI();
        if (who === null) welcome();
        else signedIn(who);
    } catch (error) {
        calm('The Desk cannot be set up now', sentence(error), 'Try again', () =>
            location.reload()
        );
    }
}

void start();
