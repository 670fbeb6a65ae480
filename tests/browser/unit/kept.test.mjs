import assert from 'node:assert/strict';
import { test } from 'node:test';
import * as keptWork from '../../../web/desk-kept.js';

/** @type {any} */
const world = globalThis;
const lease = {
    lease: 'sealed',
    expires: '2030-01-01T00:00:00Z',
    segment: {
        id: 'a',
        starts: 1,
        ends: 2,
        points: 3,
        time_reference: '',
        flux: '/api/v1/segments/a/flux',
    },
};
const before = Date.parse('2029-12-31T23:00:00Z');

/** A browser's memory for one tab, in the test's hand. */
function memory() {
    const shelf = new Map();
    world.sessionStorage = {
        getItem: (/** @type {string} */ name) => shelf.get(name) ?? null,
        setItem: (/** @type {string} */ name, /** @type {string} */ value) =>
            void shelf.set(name, value),
        removeItem: (/** @type {string} */ name) => void shelf.delete(name),
    };
    return shelf;
}

test('an unfinished segment comes back to whoever began it, while its lease runs', () => {
    memory();
    const kept = { person: 7, lease, said: { marks: [], conditions: [] }, seconds: 12 };
    keptWork.keep(kept);
    assert.deepEqual(keptWork.kept(7, before), kept);
    assert.equal(keptWork.kept(8, before), null);
    assert.equal(keptWork.kept(7, Date.parse('2030-01-01T00:00:01Z')), null);
    keptWork.forget();
    assert.equal(keptWork.kept(7, before), null);
});

test('what makes no sense in the tab’s memory is passed over', () => {
    const shelf = memory();
    for (const text of [
        '',
        '{',
        'null',
        '7',
        '{"person":7}',
        '{"person":7,"lease":{"lease":"x"}}',
    ]) {
        shelf.set('ebbmark.unfinished', text);
        assert.equal(keptWork.kept(7, before), null, text);
    }
});

test('a browser that refuses to remember loses nothing but the reload', () => {
    world.sessionStorage = {
        getItem: () => {
            throw new Error('refused');
        },
        setItem: () => {
            throw new Error('refused');
        },
    };
    keptWork.keep({ person: 7, lease, said: { marks: [], conditions: [] }, seconds: 0 });
    assert.equal(keptWork.kept(7, before), null);
});
