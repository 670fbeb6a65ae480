import assert from 'node:assert/strict';
import test from 'node:test';
import { DeskModel } from '../../../web/desk-model.js';
import { heldAt } from '../../../web/desk-overview.js';
import { patchOf, refusal } from '../../../web/desk-rows.js';
import { readFlux } from '../../../web/flux.js';
import { invent, pack } from '../mock.mjs';

const curve = invent(42, 1325.3, 15, 0.005);
/** @param {Buffer} buffer */
const arrayOf = (buffer) =>
    /** @type {ArrayBuffer} */ (buffer.buffer).slice(
        buffer.byteOffset,
        buffer.byteOffset + buffer.length
    );

function opened() {
    /** @type {string[]} */
    const told = [];
    const model = new DeskModel((what) => told.push(what));
    model.open({
        lease: {
            lease: 'x',
            expires: '',
            segment: {
                id: '',
                starts: curve.starts,
                ends: curve.ends,
                points: curve.times.length,
                time_reference: '',
                flux: '',
            },
        },
        flux: {
            as_measured: readFlux(arrayOf(pack(curve, false))),
            trend_removed: readFlux(arrayOf(pack(curve, true))),
        },
    });
    return { model, told };
}

test('the mock’s packed light curve is the one that was invented, to a fifth of a second', () => {
    const { model } = opened();
    const { times, flux } = model.curve;
    assert.equal(times.length, curve.times.length);
    times.forEach((time, at) => assert.ok(Math.abs(time - curve.times[at]) * 86400 < 0.2));
    flux.forEach((value, at) => assert.ok(Math.abs(value - curve.flux[at]) < 1e-6));
});

test('a mark made by keys reaches from where it was begun to where it was ended, whichever came first', () => {
    const { model } = opened();
    model.setCursorByKeys(1330);
    assert.equal(model.beginOrEnd(), 'begun');
    model.setCursorByKeys(1329.5);
    assert.equal(model.beginOrEnd(), 'added');
    const [mark] = model.work.said.marks;
    assert.deepEqual([mark.starts, mark.ends], [1329.5, 1330]);
    assert.ok(mark.low < mark.high);
});

test('a mark begun and ended at one place is still as long as a cadence', () => {
    const { model } = opened();
    model.setCursorByKeys(1330);
    model.beginOrEnd();
    model.beginOrEnd();
    const [mark] = model.work.said.marks;
    assert.ok(mark.ends - mark.starts >= model.step);
});

test('a box drawn with the trend removed is kept in the flux as measured, and shown where it was drawn', () => {
    const { model } = opened();
    model.setFluxView('trend_removed');
    const drawn = { starts: 1327, ends: 1327.4, low: 0.992, high: 1.001 };
    model.add(drawn);
    const [mark] = model.work.said.marks;
    const at = curve.times.findIndex((time) => time >= 1327.2);
    assert.ok(
        Math.abs(mark.high / drawn.high - curve.trend[at]) < 5e-4,
        `${mark.high} over ${drawn.high} is not ${curve.trend[at]}`
    );
    assert.ok(
        Math.abs(curve.trend[at] - 1) > 1e-4,
        'the trend must differ from 1 for this test to mean anything'
    );
    const shown = model.shown(mark);
    assert.ok(Math.abs(shown.low - drawn.low) < 1e-9 && Math.abs(shown.high - drawn.high) < 1e-9);
    model.setFluxView('as_measured');
    assert.equal(model.shown(mark).high, mark.high);
});

test('the listener hears of a change once, and not of none', () => {
    const { model, told } = opened();
    told.length = 0;
    model.setSpan({ ...model.span });
    assert.deepEqual(told, []);
    model.zoom(2);
    assert.deepEqual(told, ['window']);
});

test('keys that move the cursor out of the window take the window along', () => {
    const { model } = opened();
    model.setCursorByKeys(1326);
    model.zoom(10);
    for (let press = 0; press < 40; press++) model.moveCursor(1 / 20);
    assert.ok(model.cursor.time > model.span.t0 && model.cursor.time < model.span.t1);
    model.setCursorByKeys(9999);
    assert.equal(model.cursor.time, model.whole.t1);
});

test('what is spoken of a time says its day, its flux and the mark it lies in', () => {
    const { model } = opened();
    model.addByTimes(1330, 1331);
    assert.match(model.describe(1330.5), /^day 1330\.5000, flux \d\.\d{5}, in mark 1$/);
    assert.match(model.describe(1332), /^day 1332\.0000, flux \d\.\d{5}$/);
    const [gap] = model.gaps;
    assert.match(model.describe((gap.starts + gap.ends) / 2), /no data/);
});

test('nudging an edge moves that edge only, and presses of one key are undone together', () => {
    const { model } = opened();
    model.addByTimes(1330, 1331);
    const [before] = model.work.said.marks;
    for (let press = 0; press < 5; press++) model.nudge(before.id, 'ends', 0.1);
    const [after] = model.work.said.marks;
    assert.ok(Math.abs(after.ends - before.ends - 0.5) < 1e-9);
    assert.deepEqual(
        [after.starts, after.low, after.high],
        [before.starts, before.low, before.high]
    );
    model.undo();
    assert.deepEqual(model.work.said.marks[0], before);
});

test('a stretched flux axis stays while the window moves, until it is fitted again', () => {
    const { model } = opened();
    model.zoom(8);
    model.stretch(2);
    const range = { ...model.range };
    model.pan(0.5);
    assert.deepEqual(model.range, range);
    model.setFit(true);
    assert.notDeepEqual(model.range, range);
});

test('typed values change what they name: the length moves the end, the depth the floor', () => {
    const mark = {
        id: 1,
        starts: 10,
        ends: 11,
        low: 0.99,
        high: 1,
        certainty: /** @type {const} */ ('sure'),
    };
    assert.deepEqual(patchOf(mark, 'starts', 10.5, '%'), { starts: 10.5 });
    assert.deepEqual(patchOf(mark, 'length', 12, '%'), { ends: 10.5 });
    assert.equal(patchOf(mark, 'depth', 2, '%').low, 0.98);
    assert.equal(patchOf(mark, 'depth', 500, 'ppm').low, 0.9995);
});

test('typed values that cannot be are refused with a sentence', () => {
    const mark = {
        id: 1,
        starts: 10,
        ends: 11,
        low: 0.99,
        high: 1,
        certainty: /** @type {const} */ ('sure'),
    };
    const limits = { starts: 5, ends: 15, marksMost: 50, leastDays: 0.01 };
    const why = (
        /** @type {'starts' | 'ends' | 'length' | 'depth'} */ field,
        /** @type {number} */ value
    ) => refusal(mark, field, value, limits);
    assert.match(why('starts', NaN), /not a number/);
    assert.match(why('starts', 11.5), /before it ends/);
    assert.match(why('ends', 9), /after it starts/);
    assert.match(why('ends', 16), /from day 5\.0000 to 15\.0000/);
    assert.match(why('length', 0), /longer than nothing/);
    assert.match(why('length', 24 * 6), /ends on day 15\.0000/);
    assert.match(why('depth', -1), /not negative/);
    assert.equal(why('depth', 0.5), '');
});

test('a window narrower than two fingers is still held by its edges and by its middle', () => {
    assert.equal(heldAt(100, 100, 130), 't0');
    assert.equal(heldAt(115, 100, 130), 'move');
    assert.equal(heldAt(130, 100, 130), 't1');
    assert.equal(heldAt(80, 100, 130), 't0');
    assert.equal(heldAt(70, 100, 130), 'beside');
    assert.equal(heldAt(300, 100, 500), 'move');
});
