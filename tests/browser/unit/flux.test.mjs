import assert from 'node:assert/strict';
import test from 'node:test';
import { FluxError, gaps, readFlux, usualStep } from '../../../web/flux.js';
import { randomFrom } from '../mock.mjs';

/**
 * A body by the documented layout, written here byte by byte.
 * @param {number[]} days
 * @param {number[]} offsets
 */
function body(
    days,
    offsets,
    { n = days.length, magic = 'EBF1', reference = 2000, median = 5, noise = 0.25 } = {}
) {
    const bytes = new Uint8Array(32 + 4 * (days.length + offsets.length));
    const data = new DataView(bytes.buffer);
    [...magic].forEach((letter, at) => data.setUint8(at, letter.charCodeAt(0)));
    data.setUint32(4, n, true);
    data.setFloat64(8, reference, true);
    data.setFloat64(16, median, true);
    data.setFloat32(24, noise, true);
    [...days, ...offsets].forEach((value, at) => data.setFloat32(32 + 4 * at, value, true));
    return bytes.buffer;
}

test('a packed light curve gives its times in days and its flux about 1', () => {
    const flux = readFlux(body([0.5, 0.75], [-0.25, 0.5]));
    assert.deepEqual([...flux.times], [2000.5, 2000.75]);
    assert.deepEqual([...flux.flux], [0.75, 1.5]);
    assert.equal(flux.medianFlux, 5);
    assert.equal(flux.noise, 0.25);
});

test('a light curve without points is read', () => {
    assert.equal(readFlux(body([], [])).times.length, 0);
});

test('an unknown noise counts as none', () => {
    assert.equal(readFlux(body([0], [0], { noise: NaN })).noise, 0);
});

for (const [what, bytes] of /** @type {[string, ArrayBuffer][]} */ ([
    ['nothing', new ArrayBuffer(0)],
    ['less than a heading', new ArrayBuffer(31)],
    ['another kind of file', body([0], [0], { magic: 'EBF2' })],
    ['a count that the length does not bear out', body([0], [0], { n: 2 })],
    ['a count of four milliards', body([0], [0], { n: 0xffffffff })],
    ['a byte too many', body([0], [0]).slice(0, 39)],
    ['an endless reference time', body([0], [0], { reference: Infinity })],
    ['a median that is no number', body([0], [0], { median: NaN })],
    ['negative noise', body([0], [0], { noise: -1 })],
    ['a time that is no number', body([0, NaN], [0, 0])],
    ['times that fall', body([1, 0.5], [0, 0])],
    ['an endless flux', body([0, 1], [0, -Infinity])],
]))
    test(`a body that is ${what} is refused with a sentence`, () => {
        assert.throws(
            () => readFlux(bytes),
            (error) =>
                error instanceof FluxError &&
                /^This light curve cannot be shown: .*\.$/.test(error.message)
        );
    });

test('bytes at random are read or refused, and nothing else happens', () => {
    const random = randomFrom(1);
    for (let round = 0; round < 2000; round++) {
        const bytes = new Uint8Array(body([0, 1, 2], [0, 0, 0]));
        for (let flips = 0; flips < 4; flips++)
            bytes[Math.floor(random() * bytes.length)] = Math.floor(random() * 256);
        try {
            const flux = readFlux(bytes.buffer);
            assert.ok([...flux.times, ...flux.flux].every(Number.isFinite));
        } catch (error) {
            assert.ok(error instanceof FluxError, String(error));
        }
    }
});

test('the usual step is the median one, whatever gaps there are', () => {
    assert.equal(usualStep([0, 1, 2, 9, 10]), 1);
    assert.equal(usualStep([3]), 0);
});

test('a gap is longer than half a day and than ten cadences', () => {
    assert.deepEqual(gaps([0, 0.1, 0.55, 1.2], 0.01), [{ starts: 0.55, ends: 1.2 }]);
    assert.deepEqual(gaps([0, 0.1, 0.55, 1.2], 0.1), []);
});
