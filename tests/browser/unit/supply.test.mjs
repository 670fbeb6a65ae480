import assert from 'node:assert/strict';
import test from 'node:test';
import { makeStopwatch } from '../../../web/stopwatch.js';
import { makeSupply } from '../../../web/supply.js';

const flux = {
    reference: 0,
    medianFlux: 1,
    noise: 0,
    times: new Float64Array(0),
    flux: new Float64Array(0),
};

/** @param {{leases?: number, minutes?: number}} [options] */
function bench({ leases = 99, minutes = 15 } = {}) {
    const world = { taken: 0, views: /** @type {string[]} */ ([]), now: 0, broken: false };
    const supply = makeSupply({
        takeLease: async () => {
            if (world.broken) throw new Error('gone');
            if (world.taken >= leases) return null;
            world.taken++;
            const id = String(world.taken);
            return {
                lease: id,
                expires: new Date(world.now + minutes * 60_000).toISOString(),
                segment: { id, starts: 0, ends: 1, points: 0, time_reference: '', flux: '' },
            };
        },
        segmentFlux: async (_lease, view) => {
            world.views.push(view);
            return flux;
        },
        now: () => world.now,
    });
    return { world, supply };
}

test('the next segment is fetched ahead, both views of it, and given without asking again', async () => {
    const { world, supply } = bench();
    supply.prepare();
    supply.prepare();
    const sheet = await supply.take();
    assert.equal(sheet?.lease.lease, '1');
    assert.equal(world.taken, 1);
    assert.deepEqual(world.views.sort(), ['as_measured', 'trend_removed']);
});

test('a segment whose lease has almost run out is not shown', async () => {
    const { world, supply } = bench();
    supply.prepare();
    world.now = 13 * 60_000;
    assert.equal((await supply.take())?.lease.lease, '2');
});

test('a failure ahead of time is nothing if it works at its time', async () => {
    const { world, supply } = bench();
    world.broken = true;
    supply.prepare();
    await new Promise((resolve) => setImmediate(resolve));
    world.broken = false;
    assert.equal((await supply.take())?.lease.lease, '1');
});

test('a failure at its time is told', async () => {
    const { world, supply } = bench();
    world.broken = true;
    await assert.rejects(supply.take(), /gone/);
});

test('when nothing is left, it is asked once more before that is said', async () => {
    const { supply } = bench({ leases: 1 });
    await supply.take();
    supply.prepare();
    assert.equal(await supply.take(), null);
});

test('what was fetched for one reviewer is not given to the next', async () => {
    const { supply } = bench();
    supply.prepare();
    supply.drop();
    assert.equal((await supply.take())?.lease.lease, '2');
});

test('only the time that the page was seen counts', () => {
    let now = 1000;
    const watch = makeStopwatch(() => now);
    watch.restart(2);
    now += 3000;
    watch.setSeen(false);
    now += 60_000;
    watch.setSeen(false);
    watch.setSeen(true);
    now += 500;
    assert.equal(watch.seconds(), 5.5);
});
