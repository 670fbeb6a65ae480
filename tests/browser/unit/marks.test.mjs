import assert from 'node:assert/strict';
import test from 'node:test';
import * as marks from '../../../web/marks.js';
import { randomFrom } from '../mock.mjs';

/** @type {marks.Limits} */
const limits = { starts: 100, ends: 115, marksMost: 50, leastDays: 0.01 };
const box = (/** @type {number} */ starts, /** @type {number} */ ends) => ({
    starts,
    ends,
    low: 0.99,
    high: 1,
});
const two = () =>
    marks.markAdd(marks.markAdd(marks.workStart(), box(105, 106), limits), box(102, 103), limits);

test('marks stand in the order of their times, whatever order they were drawn in', () => {
    assert.deepEqual(
        two().said.marks.map((mark) => mark.starts),
        [102, 105]
    );
});

test('a new mark is sure, and chosen', () => {
    const work = two();
    const chosen = work.said.marks.find((mark) => mark.id === work.chosen);
    assert.equal(chosen?.starts, 102);
    assert.equal(chosen?.certainty, 'sure');
});

test('undo takes back and redo brings again, to the first step and the last', () => {
    const work = marks.conditionToggle(two(), 'break');
    const back = marks.undo(marks.undo(marks.undo(work)));
    assert.deepEqual(back.said, marks.workStart().said);
    assert.deepEqual(marks.redo(marks.redo(marks.redo(back))).said, work.said);
    assert.equal(marks.undo(back), back);
});

test('a new step forgets what could be redone', () => {
    const work = marks.markAdd(marks.undo(two()), box(110, 111), limits);
    assert.equal(marks.redo(work), work);
});

test('all moves of one drag are undone together, and the next drag apart', () => {
    let work = two();
    const id = work.said.marks[0].id;
    for (const starts of [102.1, 102.2, 102.3])
        work = marks.markChange(work, id, { starts }, limits, 'drag');
    work = marks.stepEnd(work);
    for (const ends of [103.5, 104]) work = marks.markChange(work, id, { ends }, limits, 'drag');
    assert.equal(marks.undo(work).said.marks[0].starts, 102.3);
    assert.equal(marks.undo(work).said.marks[0].ends, 103);
    assert.equal(marks.undo(marks.undo(work)).said.marks[0].starts, 102);
});

test('a change that changes nothing is no step', () => {
    const work = two();
    assert.equal(marks.markChange(work, work.said.marks[0].id, { starts: 102 }, limits), work);
    assert.equal(marks.markRemove(work, 999), work);
});

test('there are never more marks than may be sent', () => {
    let work = marks.workStart();
    for (let at = 0; at < 60; at++)
        work = marks.markAdd(work, box(100 + at / 5, 100.1 + at / 5), limits);
    assert.equal(work.said.marks.length, 50);
});

test('whatever is drawn, what would be sent is a box within the segment', () => {
    const random = randomFrom(11);
    const wild = () => 90 + 40 * random();
    let work = marks.workStart();
    for (let round = 0; round < 2000; round++) {
        const some = { starts: wild(), ends: wild(), low: random(), high: random() };
        const chosen = work.said.marks[Math.floor(random() * work.said.marks.length)];
        const act = random();
        if (act < 0.3) work = marks.markAdd(work, some, limits);
        else if (act < 0.6 && chosen) work = marks.markChange(work, chosen.id, some, limits);
        else if (act < 0.7 && chosen) work = marks.markRemove(work, chosen.id);
        else if (act < 0.85) work = marks.undo(work);
        else work = marks.redo(work);
        for (const mark of marks.reviewBody(work.said, 'lease', 1).marks) {
            assert.ok(
                mark.starts >= 100 && mark.ends <= 115 && mark.starts < mark.ends,
                JSON.stringify(mark)
            );
            assert.ok(mark.low <= mark.high);
            assert.ok(['sure', 'unsure'].includes(mark.certainty));
        }
    }
});

test('a chosen mark that is undone is chosen no more', () => {
    assert.equal(marks.undo(two()).chosen, null);
});

test('a review’s body has what the interface asks for and nothing else', () => {
    const body = marks.reviewBody(
        marks.conditionToggle(two(), 'keeps_changing').said,
        'abc',
        99999999
    );
    assert.deepEqual(Object.keys(body).sort(), ['conditions', 'lease', 'marks', 'seconds']);
    assert.deepEqual(Object.keys(body.marks[0]).sort(), [
        'certainty',
        'ends',
        'high',
        'low',
        'starts',
    ]);
    assert.deepEqual(body.conditions, ['keeps_changing']);
    assert.equal(body.seconds, 86400);
});

test('work that was kept over a reload comes back, without its steps', () => {
    const work = marks.conditionToggle(two(), 'break');
    const unsure = marks.markChange(work, work.said.marks[1].id, { certainty: 'unsure' }, limits);
    const back = marks.workRestore(JSON.parse(JSON.stringify(unsure.said)), limits);
    assert.deepEqual(
        back?.said.marks.map(({ starts, certainty }) => [starts, certainty]),
        [
            [102, 'sure'],
            [105, 'unsure'],
        ]
    );
    assert.deepEqual(back?.said.conditions, ['break']);
    assert.equal(back?.past.length, 0);
});

for (const kept of [
    null,
    7,
    'x',
    {},
    { marks: 3, conditions: [] },
    { marks: [{}], conditions: [] },
    { marks: [null], conditions: [] },
    { marks: [{ starts: 'a', ends: 1, low: 1, high: 1 }], conditions: [] },
])
    test(`kept work that makes no sense is passed over: ${JSON.stringify(kept)}`, () => {
        assert.equal(marks.workRestore(kept, limits), null);
    });
