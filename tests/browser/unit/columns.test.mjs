import assert from 'node:assert/strict';
import test from 'node:test';
import { columnsOf } from '../../../web/columns.js';
import { randomFrom } from '../mock.mjs';

test('the one low point among twenty thousand is still on the paper', () => {
    const times = Float64Array.from({ length: 20_000 }, (_, at) => at / 1000);
    const flux = Float64Array.from(times, () => 1);
    flux[12_345] = 0.5;
    const columns = columnsOf(times, flux, { t0: 0, t1: 20 }, 800);
    assert.equal(Math.min(...columns.low), 0.5);
    assert.equal(columns.low.indexOf(0.5), Math.floor((12.345 / 20) * 800));
});

test('every point of the window falls on one column, none from outside', () => {
    const random = randomFrom(3);
    const times = Float64Array.from({ length: 5000 }, () => 30 * random()).sort();
    const flux = Float64Array.from(times, () => random());
    const span = { t0: 10, t1: 17 };
    const columns = columnsOf(times, flux, span, 333);
    const inside = times.filter((time) => time >= span.t0 && time <= span.t1).length;
    assert.equal(
        columns.points.reduce((sum, points) => sum + points, 0),
        inside
    );
});

test('lowest, highest, mean and spread of a column are those of its points', () => {
    const columns = columnsOf([0.1, 0.2, 0.3, 1.5], [2, 4, 9, 7], { t0: 0, t1: 2 }, 2);
    assert.deepEqual([columns.low[0], columns.high[0], columns.mean[0]], [2, 9, 5]);
    assert.ok(Math.abs(columns.spread[0] - Math.sqrt((9 + 1 + 16) / 3)) < 1e-12);
    assert.deepEqual([columns.low[1], columns.high[1], columns.spread[1]], [7, 7, 0]);
});

test('a column without points says so', () => {
    const columns = columnsOf([0], [1], { t0: 0, t1: 10 }, 5);
    assert.equal(columns.points[4], 0);
    assert.ok(Number.isNaN(columns.low[4]));
});

test('twenty thousand points are thinned within half a frame', () => {
    const times = Float64Array.from({ length: 20_000 }, (_, at) => at / 1000);
    const flux = Float64Array.from(times, (time) => Math.sin(time));
    const runs = Array.from({ length: 30 }, () => {
        const began = performance.now();
        columnsOf(times, flux, { t0: 0, t1: 20 }, 2000);
        return performance.now() - began;
    }).sort((a, b) => a - b);
    assert.ok(runs[15] < 8, `the median run took ${runs[15].toFixed(2)} ms`);
});
