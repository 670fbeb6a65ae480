import assert from 'node:assert/strict';
import { webcrypto } from 'node:crypto';
import test from 'node:test';
import { Problem, retryAfter, Unreached } from '../../../web/api.js';
import { newKey } from '../../../web/idempotency-key.js';
import { makeQueue, meaning, waitAfter } from '../../../web/queue.js';

/** @typedef {import('../../../web/queue.js').Waiting} Waiting */

/** @param {string} key @param {number} [person] @returns {Waiting} */
const item = (key, person = 1) => ({
    key,
    person,
    handle: 'tern',
    since: Number(key.replace(/\D/g, '')),
    body: { lease: key },
    segment: { starts: 1, ends: 2, time_reference: '' },
});
const problem = (/** @type {number} */ status, /** @type {number | null} */ wait = null) =>
    new Problem(status, 'x', `Status ${status}.`, [], wait);
const settle = () => new Promise((resolve) => setImmediate(resolve));

/** A queue whose clock, storage and server are in the test's hand. @param {Waiting[]} [kept] */
function bench(kept = []) {
    const shelf = new Map(kept.map((one) => [one.key, one]));
    /** @type {{run: () => void, ms: number}[]} */
    const timers = [];
    const seen = {
        sent: /** @type {string[]} */ ([]),
        tried: /** @type {string[]} */ ([]),
        refused: /** @type {string[]} */ ([]),
    };
    const world = {
        shelf,
        timers,
        seen,
        now: 0,
        storageWorks: true,
        /** @type {(key: string) => any} */
        server: (_key) => ({ review: 1 }),
        queue: /** @type {import('../../../web/queue.js').Queue} */ (/** @type {unknown} */ (null)),
    };
    const stored = async (/** @type {() => any} */ act) => {
        if (!world.storageWorks) throw new Error('no room');
        return act();
    };
    world.queue = makeQueue({
        storage: {
            all: () => stored(() => [...shelf.values()]),
            put: (one) => stored(() => void shelf.set(one.key, one)),
            remove: (key) => stored(() => void shelf.delete(key)),
        },
        send: async (_body, key) => {
            seen.tried.push(key);
            const answer = world.server(key);
            if (answer instanceof Error) throw answer;
            return answer;
        },
        now: () => world.now,
        setTimer: (run, ms) => {
            const timer = { run, ms };
            timers.push(timer);
            return timer;
        },
        clearTimer: (timer) => {
            const at = timers.indexOf(timer);
            if (at >= 0) timers.splice(at, 1);
        },
        random: () => 1,
        onChange: () => undefined,
        onSent: (one) => seen.sent.push(one.key),
        onRefused: (one) => seen.refused.push(one.key),
    });
    return world;
}

test('a review is on the shelf before its answer, and off it after', async () => {
    const world = bench();
    /** @type {(value: any) => void} */
    let answer = () => undefined;
    world.server = () => undefined;
    world.queue.setPerson(1);
    const slow = makeSlow(world, (resolve) => (answer = resolve));
    await slow.add(item('k1'));
    await settle();
    assert.deepEqual([...world.shelf.keys()], ['k1']);
    answer({ review: 1 });
    await settle();
    await settle();
    assert.deepEqual([...world.shelf.keys()], []);
    assert.equal(slow.state().waiting.length, 0);
});

/**
 * The same shelf with a server that answers when told.
 * @param {ReturnType<typeof bench>} world
 * @param {(resolve: (value: any) => void) => void} tell
 */
function makeSlow(world, tell) {
    const queue = makeQueue({
        storage: {
            all: async () => [...world.shelf.values()],
            put: async (one) => void world.shelf.set(one.key, one),
            remove: async (key) => void world.shelf.delete(key),
        },
        send: () => new Promise((resolve) => tell(resolve)),
        now: () => 0,
        setTimer: () => 0,
        clearTimer: () => undefined,
        random: () => 0,
        onChange: () => undefined,
        onSent: () => undefined,
        onRefused: () => undefined,
    });
    queue.setPerson(1);
    return queue;
}

test('a network failure is tried again with the same key, later each time, up to a minute', async () => {
    const world = bench();
    world.queue.setPerson(1);
    world.server = () => new Unreached('gone');
    await world.queue.add(item('k1'));
    await settle();
    const waits = [];
    for (let round = 0; round < 9; round++) {
        assert.equal(world.timers.length, 1);
        const timer = world.timers.pop();
        waits.push(timer?.ms);
        timer?.run();
        await settle();
    }
    assert.deepEqual(waits, [1000, 2000, 4000, 8000, 16000, 32000, 60000, 60000, 60000]);
    assert.deepEqual(new Set(world.seen.tried), new Set(['k1']));
    assert.deepEqual([...world.shelf.keys()], ['k1']);
});

test('the wait that the server asks for is kept, if it is the longer', () => {
    assert.equal(waitAfter(1, 1, 7000), 7000);
    assert.equal(waitAfter(5, 1, 7000), 16000);
    assert.equal(waitAfter(1, 0, null), 500);
});

test('after 503 with Retry-After nothing is sent before its time', async () => {
    const world = bench();
    world.queue.setPerson(1);
    world.server = () => problem(503, 30_000);
    await world.queue.add(item('k1'));
    await settle();
    assert.equal(world.timers[0].ms, 30_000);
    assert.equal(world.queue.state().nextTry, 30_000);
    assert.equal(world.queue.state().trouble, 'Status 503.');
});

test('401 stops the sending, and signing in again goes on with it', async () => {
    const world = bench();
    world.queue.setPerson(1);
    world.server = () => problem(401);
    await world.queue.add(item('k1'));
    await settle();
    assert.equal(world.queue.state().signInNeeded, true);
    assert.equal(world.timers.length, 0);
    world.server = () => ({ review: 5 });
    world.queue.setPerson(1);
    await settle();
    assert.deepEqual(world.seen.sent, ['k1']);
    assert.equal(world.queue.state().signInNeeded, false);
});

test('a review that the server will never take is given up and told, and the next is sent', async () => {
    const world = bench([item('k1'), item('k2')]);
    world.server = (key) => (key === 'k1' ? problem(409) : { review: 2 });
    await world.queue.open();
    world.queue.setPerson(1);
    await settle();
    await settle();
    assert.deepEqual(world.seen.refused, ['k1']);
    assert.deepEqual(world.seen.sent, ['k2']);
    assert.equal(world.shelf.size, 0);
});

test('what an earlier page left is sent once its reviewer is signed in, oldest first', async () => {
    const world = bench([item('k2'), item('k1')]);
    await world.queue.open();
    await settle();
    assert.deepEqual(world.seen.tried, []);
    world.queue.setPerson(1);
    await settle();
    await settle();
    assert.deepEqual(world.seen.sent, ['k1', 'k2']);
});

test('nobody’s review is sent in somebody else’s name', async () => {
    const world = bench([item('k1', 2)]);
    await world.queue.open();
    world.queue.setPerson(1);
    await settle();
    assert.deepEqual(world.seen.tried, []);
    assert.equal(world.queue.state().waiting.length, 1);
});

test('a browser that keeps nothing still sends, and says that it keeps nothing', async () => {
    const world = bench();
    world.storageWorks = false;
    world.queue.setPerson(1);
    await world.queue.add(item('k1'));
    await settle();
    await settle();
    assert.deepEqual(world.seen.sent, ['k1']);
    assert.equal(world.queue.state().kept, false);
});

test('a review added during sending is sent too', async () => {
    const world = bench();
    world.queue.setPerson(1);
    await Promise.all([
        world.queue.add(item('k1')),
        world.queue.add(item('k2')),
        world.queue.add(item('k3')),
    ]);
    for (let round = 0; round < 6; round++) await settle();
    assert.deepEqual(world.seen.sent, ['k1', 'k2', 'k3']);
    assert.equal(world.seen.tried.length, 3);
});

test('one that is discarded is gone from the shelf', async () => {
    const world = bench([item('k1', 2), item('k2', 3)]);
    await world.queue.open();
    await world.queue.discard('k1');
    await world.queue.discardOf(3);
    assert.equal(world.shelf.size, 0);
});

test('each kind of failure means one thing', () => {
    const means = (/** @type {number} */ status) => meaning(problem(status));
    assert.deepEqual([408, 429, 500, 503, 507].map(means), Array(5).fill('again'));
    assert.deepEqual([400, 403, 409, 413, 422].map(means), Array(5).fill('refused'));
    assert.equal(means(401), 'sign in');
    assert.equal(meaning(new Unreached('gone')), 'again');
});

test('Retry-After is read as seconds and as a date, and nonsense as none', () => {
    assert.equal(retryAfter('3', 0), 3000);
    assert.equal(retryAfter('Thu, 01 Jan 1970 00:00:10 GMT', 4000), 6000);
    assert.equal(retryAfter('Thu, 01 Jan 1970 00:00:10 GMT', 99_000), 0);
    assert.equal(retryAfter('999999999', 0), 3_600_000);
    assert.equal(retryAfter('soon', 0), null);
    assert.equal(retryAfter('', 0), null);
    assert.equal(retryAfter(null, 0), null);
});

test('a key can be made where there is no randomUUID, and each is another', () => {
    const source = /** @type {any} */ ({
        getRandomValues: webcrypto.getRandomValues.bind(webcrypto),
    });
    const keys = new Set(Array.from({ length: 1000 }, () => newKey(source)));
    assert.equal(keys.size, 1000);
    for (const key of keys)
        assert.match(key, /^[0-9a-f]{8}-[0-9a-f]{4}-4[0-9a-f]{3}-[89ab][0-9a-f]{3}-[0-9a-f]{12}$/);
});
