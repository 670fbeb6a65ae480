import assert from 'node:assert/strict';
import { readFile } from 'node:fs/promises';
import test from 'node:test';
import { flagSentences, termsSentence } from '../../../web/candidates-closer.js';
import * as questions from '../../../web/candidates-question.js';
import { controlSentence } from '../../../web/desk-slip.js';
import * as format from '../../../web/format.js';
import { outboxSentence } from '../../../web/outbox.js';
import { asideSentence, markSentence, skillSentence } from '../../../web/record-words.js';
import { flattened, stretchOf } from '../../../web/thumbnail.js';

test('an axis is labelled with the time reference and a true minus sign', () => {
    assert.equal(format.axis('BJD_TDB - 2460000'), 'BJD_TDB − 2460000, days');
    assert.equal(format.axis('BJD-2457000'), 'BJD − 2457000, days');
    assert.equal(format.axis(''), 'time, days');
});

test('a number that rounds to nothing has no minus sign', () => {
    assert.equal(format.fixed(-0.0001, 2), '0.00');
    assert.equal(format.fixed(-0.1, 1), '−0.1');
});

test('numbers are read as people type them, and nothing else is a number', () => {
    assert.equal(format.typed(' 1330.5 '), 1330.5);
    assert.equal(format.typed('1330,5'), 1330.5);
    assert.equal(format.typed('−2'), -2);
    assert.equal(format.typed('1e-3'), 0.001);
    for (const text of ['', '.', 'abc', '1.2.3', '0x10', 'Infinity', '1330.5 d'])
        assert.ok(Number.isNaN(format.typed(text)), text);
});

test('no probability reads as certain', () => {
    assert.equal(format.probability(0.99995), '> 0.999');
    assert.equal(format.probability(0.00001), '< 0.001');
    assert.equal(format.probability(0.5), '0.500');
});

test('a depth reads in percent and in ppm', () => {
    assert.equal(format.depth(0.00123, '%'), '0.1230');
    assert.equal(format.depth(0.00123, 'ppm'), '1230');
});

test('skill is one sentence with its interval, or not known yet', () => {
    assert.match(skillSentence(null), /^Not known yet/);
    const rate = (
        /** @type {number} */ value,
        /** @type {number} */ low,
        /** @type {number} */ high
    ) => ({ value, low, high });
    const text = skillSentence({ hit: rate(0.71, 0.52, 0.85), chance: rate(0.08, 0.02, 0.2) });
    assert.equal(
        text,
        'By the latest estimate you mark about 71\u00a0% of the dips of middling strength (SNR 10) that you are shown (90 % interval: 52 to 85\u00a0%), and about 8\u00a0% of the places that others marked but that are no dip (2 to 20\u00a0%).'
    );
    const unknown = /** @type {any} */ ({ value: null, low: null, high: null });
    assert.match(skillSentence({ hit: unknown, chance: unknown }), /^Not known yet/);
});

test('a mark reads with its times, length and depth', () => {
    assert.equal(
        markSentence({ starts: 1330, ends: 1330.25, low: 0.99, high: 1, certainty: 'unsure' }),
        '1330.0000 to 1330.2500 (6.00\u00a0h, 1.00\u00a0% deep, unsure)'
    );
    assert.equal(
        asideSentence(['break', 'keeps_changing'], true),
        'a break in the data; keeps changing; came late, still taken'
    );
});

test('a control says what had been put there and whether it was found', () => {
    const dips = [
        { starts: 10, ends: 10.5, found: true },
        { starts: 12, ends: 12.5, found: false },
    ];
    assert.equal(
        controlSentence({ kind: 'injected', dips }, 1),
        'The segment before this one was a control: 2 model dips had been put into it, from day 10.0000 to 10.5000 (you found it); from day 12.0000 to 12.5000 (you did not mark it).'
    );
    assert.match(
        controlSentence({ kind: 'inverted', dips: [] }, 0),
        /turned upside down.*You said that there was none\.$/
    );
    assert.match(
        controlSentence({ kind: 'inverted', dips: [] }, 2),
        /Your marks are on something that is no dip\.$/
    );
});

test('the outbox says honestly what it waits for', () => {
    const state = {
        waiting: [/** @type {any} */ ({})],
        sending: false,
        signInNeeded: false,
        nextTry: 5000,
        trouble: 'Gone.',
        kept: true,
    };
    assert.equal(outboxSentence(state, 0), 'Gone. Trying again in 5 seconds.');
    assert.match(outboxSentence({ ...state, signInNeeded: true }, 0), /sign in again/);
    assert.match(outboxSentence({ ...state, kept: false }, 0), /leave this page open/);
    assert.equal(outboxSentence({ ...state, waiting: [] }, 0), 'Everything is sent.');
});

test('a question and its address are each other’s inverse, and nonsense is left out', () => {
    const question = questions.questionOf(
        '?min_probability=0.5&star=RB-0001&sort=snr&cursor=3.50.ab'
    );
    assert.deepEqual(questions.questionOf(questions.addressOf(question).split('?')[1]), question);
    assert.equal(questions.addressOf(questions.questionOf('?sort=nonsense&foo=1')), '/candidates');
    assert.equal(
        questions.tableOf(question, 'csv'),
        '/api/v1/candidates?min_probability=0.5&star=RB-0001&sort=snr&format=csv'
    );
});

test('a click on a heading sorts the useful way first, and the other way next', () => {
    assert.equal(questions.sortedBy('-probability', 'snr'), '-snr');
    assert.equal(questions.sortedBy('-snr', 'snr'), 'snr');
    assert.equal(questions.sortedBy('snr', 'star'), 'star');
    assert.equal(questions.sortState('-snr', 'snr'), 'descending');
    assert.equal(questions.sortState('-snr', 'star'), 'none');
});

test('every flag that the program knows has the program’s own sentence', async () => {
    const header = await readFile(
        new URL('../../../include/ebbmark/campaign.h', import.meta.url),
        'utf8'
    );
    const table = [...header.matchAll(/X\(\d+,\s*(\w+),\s*"([^"]+)"\)/g)];
    assert.ok(table.length >= 6);
    for (const [, name, sentence] of table) assert.deepEqual(flagSentences(name), [sentence]);
});

test('flags are sentences, and one that is new is shown by its name', () => {
    assert.deepEqual(flagSentences('near_gap odd_thing'), [
        'An edge of the dip lies within half its duration of a gap.',
        'odd_thing',
    ]);
    assert.deepEqual(flagSentences(null), []);
});

test('the terms of the odds are named with their signs', () => {
    assert.equal(
        termsSentence({ looks: 2.1, time: 1.4, snr: null, prior: -1.25 }, 2.25),
        'The natural logarithm of its odds: who marked and who did not +2.10, agreement in time +1.40, how common dips are −1.25, together +2.25.'
    );
    assert.equal(termsSentence({ looks: null, time: null, snr: null, prior: null }, null), '');
});

test('a thumbnail leaves out what is no number and takes the trend away', () => {
    const { times, flux } = flattened({
        times: [1, 2, null, 4],
        flux: [1.1, null, 1, 0.9],
        trend: [1.1, 1, 1, 0.9],
    });
    assert.deepEqual([...times], [1, 4]);
    assert.deepEqual([...flux], [1, 1]);
});

test('a thumbnail shows the whole candidate and some light beside it', () => {
    const { t0, t1 } = stretchOf({ star: 'RB-0001', starts: 10, ends: 11, mid_time: 10.5 });
    assert.ok(t0 < 7 && t1 > 14);
});

test('an error as large as its value is not written as if it were known', () => {
    assert.equal(format.withError(1.37, 0.0249, 2), '1.37 ± 0.02');
    assert.equal(format.withError(1.37, 732235, 2), '1.37 ± ?');
    assert.equal(format.withError(1.37, null, 2), '1.37');
    assert.equal(format.withError(null, 1, 2), '–');
});
