import assert from 'node:assert/strict';
import test from 'node:test';
import * as geometry from '../../../web/geometry.js';
import { randomFrom } from '../mock.mjs';

const plot = { left: 50, top: 10, width: 200, height: 100 };
const view = { t0: 100, t1: 110, f0: 0.9, f1: 1.1 };
const bounds = { t0: 100, t1: 110 };

/** @param {number} one @param {number} other */
const near = (one, other, within = 1e-9) =>
    assert.ok(Math.abs(one - other) <= within, `${one} is not ${other}`);

test('a place on the paper and its time and flux are each other’s inverse', () => {
    near(geometry.timeToX(view, plot, 105), 150);
    near(geometry.fluxToY(view, plot, 1.1), 10);
    near(geometry.fluxToY(view, plot, 0.9), 110);
    near(geometry.xToTime(view, plot, geometry.timeToX(view, plot, 103.21)), 103.21);
    near(geometry.yToFlux(view, plot, geometry.fluxToY(view, plot, 0.987)), 0.987);
});

test('zooming keeps the time under the pointer where it is', () => {
    const span = geometry.spanZoom({ t0: 102, t1: 108 }, bounds, 2, 103.5, 0.1);
    near(span.t1 - span.t0, 3);
    near((103.5 - span.t0) / 3, 1.5 / 6);
});

test('a window never leaves the segment, nor gets shorter than the least', () => {
    const random = randomFrom(5);
    let span = { ...bounds };
    for (let round = 0; round < 3000; round++) {
        const about = 99 + 12 * random();
        const by = 8 * (random() - 0.5);
        span =
            random() < 0.5
                ? geometry.spanZoom(span, bounds, 0.3 + 3 * random(), about, 0.25)
                : geometry.spanWithin({ t0: span.t0 + by, t1: span.t1 + by }, bounds);
        assert.ok(span.t0 >= 100 - 1e-9 && span.t1 <= 110 + 1e-9, JSON.stringify(span));
        assert.ok(span.t1 - span.t0 >= 0.25 - 1e-9, JSON.stringify(span));
    }
});

test('a window’s edge is dragged no nearer to the other than the least', () => {
    assert.deepEqual(geometry.spanEdge({ t0: 102, t1: 104 }, bounds, 't0', 109, 0.5), {
        t0: 103.5,
        t1: 104,
    });
    assert.deepEqual(geometry.spanEdge({ t0: 102, t1: 104 }, bounds, 't1', 200, 0.5), {
        t0: 102,
        t1: 110,
    });
});

test('what lies under two fingers stays under them', () => {
    const span = { t0: 102, t1: 108 };
    const moved = geometry.spanPinch(span, [0.25, 0.5], [0.2, 0.7], bounds, 0.1);
    const under = (/** @type {{t0: number, t1: number}} */ of, /** @type {number} */ share) =>
        of.t0 + share * (of.t1 - of.t0);
    near(under(moved, 0.2), under(span, 0.25));
    near(under(moved, 0.7), under(span, 0.5));
});

test('the window follows a time that would leave it, and stays for one in sight', () => {
    const span = { t0: 102, t1: 104 };
    assert.equal(geometry.spanShowing(span, bounds, 103), span);
    const after = geometry.spanShowing(span, bounds, 105);
    assert.ok(after.t0 < 105 && after.t1 > 105);
    near(after.t1 - after.t0, 2);
});

test('the nearest point is found at both ends and between', () => {
    const times = [1, 2, 4];
    assert.equal(geometry.nearestAt(times, -5), 0);
    assert.equal(geometry.nearestAt(times, 2.9), 1);
    assert.equal(geometry.nearestAt(times, 3.1), 2);
    assert.equal(geometry.nearestAt(times, 9), 2);
    assert.equal(geometry.nearestAt([], 9), -1);
});

test('the flux axis shows every point of the window, low ones and high ones', () => {
    const range = geometry.fluxFit([1, 2, 3, 4], [0.1, 0.8, 1.3, 5], { t0: 2, t1: 3 });
    assert.ok(range.f0 < 0.8 && range.f0 > 0.1 && range.f1 > 1.3 && range.f1 < 5);
});

test('a window without points still has a flux axis', () => {
    const { f0, f1 } = geometry.fluxFit([], [], bounds);
    assert.ok(f0 < 1 && f1 > 1);
});

test('the marks of an axis are round numbers within it', () => {
    assert.deepEqual(
        geometry.ticks(1325.3, 1340.3, 8).values,
        [1326, 1328, 1330, 1332, 1334, 1336, 1338, 1340]
    );
    const fine = geometry.ticks(0.9931, 0.9969, 4);
    assert.equal(fine.decimals, 3);
    assert.deepEqual(
        fine.values.map((value) => value.toFixed(3)),
        ['0.994', '0.995', '0.996']
    );
    assert.deepEqual(geometry.ticks(5, 5, 4).values, []);
});

test('an axis never has more marks than asked for, give or take one', () => {
    const random = randomFrom(9);
    for (let round = 0; round < 1000; round++) {
        const from = 1e4 * (random() - 0.5);
        const to = from + 10 ** (6 * random() - 4);
        const { values } = geometry.ticks(from, to, 7);
        assert.ok(values.length >= 1 && values.length <= 8, `${from} to ${to}: ${values.length}`);
    }
});

test('edges, corners and the inside of a box are told apart', () => {
    const box = { starts: 102, ends: 108, low: 0.95, high: 1.05 };
    const [left, right] = [90, 210];
    const [top, bottom] = [35, 85];
    const at = (/** @type {number} */ x, /** @type {number} */ y) =>
        geometry.partUnder(view, plot, box, x, y, 8);
    assert.deepEqual(at(150, 60), { time: null, flux: null });
    assert.deepEqual(at(left - 5, 60), { time: 'starts', flux: null });
    assert.deepEqual(at(right + 5, 60), { time: 'ends', flux: null });
    assert.deepEqual(at(150, top), { time: null, flux: 'high' });
    assert.deepEqual(at(left, bottom), { time: 'starts', flux: 'low' });
    assert.equal(at(left - 9, 60), null);
});

test('a box narrower than a finger can still be moved by its middle', () => {
    const box = { starts: 105, ends: 105.6, low: 0.95, high: 1.05 };
    assert.deepEqual(geometry.partUnder(view, plot, box, 156, 60, 24), { time: null, flux: null });
    assert.deepEqual(geometry.partUnder(view, plot, box, 151, 60, 24), {
        time: 'starts',
        flux: null,
    });
});

test('a box that is moved keeps its size and stays in the segment', () => {
    const box = { starts: 108, ends: 109, low: 0.9, high: 1 };
    const moved = geometry.boxDrag(box, { time: null, flux: null }, 5, 0.1, bounds, 0.01);
    near(moved.starts, 109);
    near(moved.ends, 110);
    near(moved.low, 1);
    near(moved.high, 1.1);
});

test('an edge that is dragged past the other stops before it', () => {
    const box = { starts: 102, ends: 103, low: 0.9, high: 1 };
    const drag = (
        /** @type {geometry.Part} */ part,
        /** @type {number} */ days,
        /** @type {number} */ flux
    ) => geometry.boxDrag(box, part, days, flux, bounds, 0.01);
    near(drag({ time: 'starts', flux: null }, 5, 0).starts, 102.99);
    near(drag({ time: 'ends', flux: null }, -5, 0).ends, 102.01);
    near(drag({ time: null, flux: 'low' }, 0, 1).low, 1);
    near(drag({ time: 'starts', flux: 'high' }, -9, -1).starts, 100);
});

test('a box drawn from right to left and upwards is the same box', () => {
    const [one, other] = [
        { time: 104, flux: 0.9 },
        { time: 102, flux: 1 },
    ];
    assert.deepEqual(
        geometry.boxBetween(one, other, bounds, 0.01),
        geometry.boxBetween(other, one, bounds, 0.01)
    );
});

test('a box begun on the very end of the segment has its least length within it', () => {
    const box = geometry.boxBetween({ time: 110, flux: 1 }, { time: 112, flux: 1 }, bounds, 0.5);
    near(box.starts, 109.5);
    near(box.ends, 110);
});

test('a box given by its times reaches from the level beside it to the floor of the dip', () => {
    const times = Array.from({ length: 300 }, (_, at) => 100 + at / 100);
    const flux = times.map((time) => (time > 101 && time < 102 ? 0.9 : 1));
    const { low, high } = geometry.heightsFor(times, flux, 100.95, 102.05);
    near(low, 0.9);
    near(high, 1);
});

test('a box given by its times where there are no points is flat on the level beside it', () => {
    assert.deepEqual(geometry.heightsFor([1, 2, 8, 9], [0.5, 0.5, 0.5, 0.5], 4, 6), {
        low: 0.5,
        high: 0.5,
    });
    assert.deepEqual(geometry.heightsFor([], [], 4, 6), { low: 1, high: 1 });
});

test('the ratio of two views is that of their levels about the box', () => {
    const times = [1, 2, 3, 4, 5];
    near(geometry.levelRatio(times, [1, 1.2, 1.2, 1.2, 9], [1, 1, 1, 1, 1], 2, 4), 1.2);
    near(geometry.levelRatio(times, [1, 1.2, 1.2, 1.2, 9], [1, 1, 1, 1, 1], 4.8, 4.9), 9);
    near(geometry.levelRatio(times, [1, 2], [1, 1], 2, 4), 1);
});
