/**
 * The Desk as reviewers use it: by mouse, by keyboard alone, by finger, and without a connection.
 */
import assert from 'node:assert/strict';
import test from 'node:test';
import {
    bench,
    chart,
    close,
    DESKTOP,
    drag,
    enterAsGuest,
    fingers,
    newHandle,
    PHONE,
    record,
    recordOf,
    rows,
    segmentShown,
    tabTo,
} from './bench.mjs';

const it = bench();
const near = (
    /** @type {number} */ one,
    /** @type {number} */ other,
    /** @type {number} */ within
) => assert.ok(Math.abs(one - other) <= within, `${one} is not within ${within} of ${other}`);

test('somebody joins, boxes a dip with the mouse, sends it, and finds it in the record', async () => {
    const page = await it.page();
    const handle = newHandle();
    await page.goto('/');
    const join = page.locator('form', { has: page.getByRole('button', { name: 'Join' }) });
    await join.getByLabel('Handle').fill(handle);
    await join.getByLabel('Passphrase').fill('low water at noon');
    await join.getByRole('button', { name: 'Join' }).click();
    const segment = await segmentShown(page);
    assert.match(page.url(), /\/desk$/);
    assert.equal(
        await page.getByRole('button', { name: 'Send marks' }).getAttribute('aria-disabled'),
        'true'
    );
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    const [drawn] = await rows(page);
    near(drawn.length, (drawn.ends - drawn.starts) * 24, 0.01);
    await page.getByRole('button', { name: 'Send marks' }).click();
    await segmentShown(page, segment);
    const all = await recordOf(page, 1);
    const [mark] = all.reviews[0].marks;
    near(mark.starts, drawn.starts, 1e-4);
    near(mark.ends, drawn.ends, 1e-4);
    near((mark.high - mark.low) * 100, drawn.depth, 1e-3);
    assert.equal(mark.certainty, 'sure');
    await page.getByRole('link', { name: 'My record' }).click();
    await page.locator('[data-part="review-rows"] tr').waitFor();
    const shown = await page.locator('[data-part="review-rows"]').textContent();
    assert.ok(shown?.includes(mark.starts.toFixed(4)), shown ?? '');
    await close(page);
});

test('a box lies where the mouse drew it', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    const { width } = await chart(page);
    const [, from, to] = /** @type {RegExpExecArray} */ (
        /([\d.]+) to ([\d.]+)/.exec(String(await page.locator('[data-part="title"]').textContent()))
    );
    const gutter =
        72 *
        (await page.evaluate(
            () => parseFloat(getComputedStyle(document.documentElement).fontSize) / 16
        ));
    const timeAt = (/** @type {number} */ share) =>
        Number(from) +
        ((share * width - gutter) / (width - gutter - 10)) * (Number(to) - Number(from));
    await drag(page, [0.3, 0.2], [0.42, 0.7]);
    const [drawn] = await rows(page);
    near(drawn.starts, timeAt(0.3), 0.03);
    near(drawn.ends, timeAt(0.42), 0.03);
    await close(page);
});

test('a box is moved, resized by an edge and by a corner, and each is undone by one step', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    const [first] = await rows(page);
    await drag(page, [0.45, 0.45], [0.55, 0.5]);
    const [moved] = await rows(page);
    near(moved.length, first.length, 0.02);
    assert.ok(moved.starts > first.starts + 0.5);
    await drag(page, [0.6, 0.5], [0.65, 0.5]);
    const [wider] = await rows(page);
    near(wider.starts, moved.starts, 1e-4);
    near(wider.depth, moved.depth, 1e-4);
    assert.ok(wider.ends > moved.ends + 0.3);
    await drag(page, [0.65, 0.65], [0.7, 0.75]);
    const [larger] = await rows(page);
    assert.ok(larger.ends > wider.ends + 0.3 && larger.depth > wider.depth);
    await page.keyboard.press('Control+z');
    assert.deepEqual(await rows(page), [wider]);
    await page.getByRole('button', { name: 'Undo' }).click();
    assert.deepEqual(await rows(page), [moved]);
    await page.keyboard.press('Control+Shift+z');
    assert.deepEqual(await rows(page), [wider]);
    await page.getByRole('button', { name: 'Delete mark 1' }).click();
    assert.deepEqual(await rows(page), []);
    await page.keyboard.press('Control+z');
    assert.deepEqual(await rows(page), [wider]);
    await close(page);
});

test('a row’s fields change its mark, and refuse what cannot be', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    const [first] = await rows(page);
    const length = page.getByLabel('Mark 1 length, hours');
    await length.fill('12');
    await length.press('Enter');
    const [longer] = await rows(page);
    near(longer.ends, first.starts + 0.5, 1e-3);
    await page.getByRole('button', { name: /show in ppm/ }).click();
    const depth = page.getByLabel('Mark 1 depth, ppm');
    await depth.fill('2500');
    await depth.press('Tab');
    assert.equal((await rows(page))[0].depth, 2500);
    const starts = page.getByLabel('Mark 1 starts', { exact: true }).and(page.locator('input'));
    await starts.fill('yesterday');
    await starts.press('Enter');
    assert.equal(await starts.getAttribute('aria-invalid'), 'true');
    await page.getByText('This is not a number.').waitFor();
    await page.getByRole('button', { name: 'Mark 1 is sure; make it unsure' }).click();
    await page.getByRole('button', { name: 'Keeps changing' }).click();
    const segment = await segmentShown(page);
    await page.getByRole('button', { name: 'Send marks' }).click();
    await segmentShown(page, segment);
    const [review] = (await recordOf(page, 1)).reviews;
    assert.equal(review.marks[0].certainty, 'unsure');
    near((review.marks[0].high - review.marks[0].low) * 1e6, 2500, 0.5);
    assert.deepEqual(review.conditions, ['keeps_changing']);
    await close(page);
});

test('the whole job is done by keyboard alone', async () => {
    const page = await it.page();
    await page.goto('/');
    await page.getByRole('button', { name: 'Look around as a guest' }).waitFor();
    await tabTo(page, (name) => name === 'Look around as a guest');
    await page.keyboard.press('Enter');
    const segment = await segmentShown(page);
    await page.waitForFunction(() => document.activeElement?.getAttribute('data-part') === 'strip');
    for (let press = 0; press < 6; press++) await page.keyboard.press('Shift+ArrowRight');
    await page.keyboard.press('Enter');
    for (let press = 0; press < 12; press++) await page.keyboard.press('ArrowRight');
    await page.waitForFunction(() =>
        /mark begun/.test(document.querySelector('[data-part="spoken"]')?.textContent ?? '')
    );
    await page.keyboard.press('Enter');
    const [made] = await rows(page);
    assert.ok(made.length > 1, JSON.stringify(made));
    await page.waitForFunction(() =>
        /^Mark 1 made/.test(document.querySelector('[data-part="spoken"]')?.textContent ?? '')
    );
    await tabTo(page, (name) => name === 'Mark 1 ends');
    for (let press = 0; press < 4; press++) await page.keyboard.press('ArrowRight');
    const [longer] = await rows(page);
    assert.ok(longer.ends > made.ends && longer.starts === made.starts);
    await page.keyboard.press('s');
    await tabTo(page, (name) => name === 'A break in the data');
    await page.keyboard.press('Space');
    await tabTo(page, (name) => name === 'Send marks');
    await page.keyboard.press('Enter');
    const second = await segmentShown(page, segment);
    await page.waitForFunction(() => document.activeElement?.getAttribute('data-part') === 'strip');
    await page.keyboard.press('Control+Enter');
    await segmentShown(page, second);
    const all = await recordOf(page, 2);
    const [noDips, withMark] = all.reviews;
    assert.deepEqual(noDips.marks, []);
    assert.equal(withMark.marks.length, 1);
    assert.equal(withMark.marks[0].certainty, 'unsure');
    assert.deepEqual(withMark.conditions, ['break']);
    near(withMark.marks[0].ends, longer.ends, 1e-4);
    await close(page);
});

test('the cursor speaks its time and flux, and whether it is in a mark', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await page.locator('[data-part="strip"]').focus();
    const spoken = (/** @type {RegExp} */ pattern) =>
        page.waitForFunction(
            (text) =>
                new RegExp(text).test(
                    document.querySelector('[data-part="spoken"]')?.textContent ?? ''
                ),
            pattern.source
        );
    await page.keyboard.press('Shift+ArrowRight');
    await spoken(/^day \d+\.\d{4}, (flux \d\.\d{5}|no data)$/);
    await page.keyboard.press('m');
    await page.keyboard.press('Shift+ArrowRight');
    await page.keyboard.press('m');
    await page.keyboard.press('ArrowLeft');
    await spoken(/in mark 1$/);
    await page.keyboard.press('Delete');
    assert.deepEqual(await rows(page), []);
    await spoken(/^Mark 1 deleted\.$/);
    await close(page);
});

test('zoom, pan and the window below agree, by wheel, buttons, keys and drag', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    const grip = page.getByRole('slider', { name: 'Stretch shown above' });
    const shown = async () => {
        const text = await grip.getAttribute('aria-valuetext');
        const [, from, to] = /** @type {RegExpExecArray} */ (
            /day ([\d.]+) to ([\d.]+)/.exec(String(text))
        );
        return { from: Number(from), to: Number(to), days: Number(to) - Number(from) };
    };
    const settle = () =>
        page.evaluate(
            () =>
                new Promise((resolve) =>
                    requestAnimationFrame(() => requestAnimationFrame(() => resolve(undefined)))
                )
        );
    const whole = await shown();
    const { at } = await chart(page);
    const middle = at(0.5, 0.5);
    await page.mouse.move(middle.x, middle.y);
    await page.mouse.wheel(0, -400);
    await page.waitForFunction((days) => {
        const text =
            document.querySelector('[data-part="window"]')?.getAttribute('aria-valuetext') ?? '';
        const [from, to] = (text.match(/[\d.]+/g) ?? []).map(Number);
        return to - from < days * 0.8;
    }, whole.days);
    const wheeled = await shown();
    await page.getByRole('button', { name: 'Later' }).click();
    await settle();
    assert.ok((await shown()).from > wheeled.from);
    await grip.focus();
    await page.keyboard.press('ArrowLeft');
    await settle();
    const before = await shown();
    const overview = await page.locator('[data-part="overview"]').boundingBox();
    const box = await grip.boundingBox();
    assert.ok(overview && box);
    await page.mouse.move(box.x + box.width / 2, overview.y + overview.height / 2);
    await page.mouse.down();
    await page.mouse.move(box.x + box.width / 2 - 60, overview.y + overview.height / 2, {
        steps: 3,
    });
    await page.mouse.up();
    await settle();
    const dragged = await shown();
    assert.ok(dragged.from < before.from);
    near(dragged.days, before.days, 0.03);
    const right = await grip.boundingBox();
    assert.ok(right);
    await page.mouse.move(right.x + right.width, overview.y + overview.height / 2);
    await page.mouse.down();
    await page.mouse.move(right.x + right.width + 50, overview.y + overview.height / 2, {
        steps: 3,
    });
    await page.mouse.up();
    await settle();
    assert.ok((await shown()).days > dragged.days);
    await page.locator('[data-part="strip"]').focus();
    await page.keyboard.press('0');
    await settle();
    assert.deepEqual(await shown(), whole);
    await close(page);
});

test('the view without the trend is another picture of the same marks', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    const picture = () =>
        page
            .locator('[data-part="strip-points"]')
            .evaluate((canvas) => /** @type {HTMLCanvasElement} */ (canvas).toDataURL());
    const before = { rows: await rows(page), picture: await picture() };
    await page.getByRole('button', { name: 'Trend removed' }).click();
    await page.waitForFunction(
        (old) =>
            /** @type {HTMLCanvasElement} */ (
                document.querySelector('[data-part="strip-points"]')
            ).toDataURL() !== old,
        before.picture
    );
    assert.deepEqual(await rows(page), before.rows);
    await close(page);
});

test('on a phone one finger draws, two fingers zoom, and what is sent is what was drawn', async () => {
    const page = await it.page(PHONE);
    await enterAsGuest(page);
    await fingers(page, [
        [
            [0.3, 0.3],
            [0.4, 0.4],
            [0.55, 0.6],
        ],
    ]);
    const [drawn] = await rows(page);
    assert.ok(drawn.length > 10, JSON.stringify(drawn));
    await fingers(page, [
        [
            [0.45, 0.5],
            [0.4, 0.5],
            [0.3, 0.5],
        ],
        [
            [0.6, 0.5],
            [0.7, 0.5],
            [0.85, 0.5],
        ],
    ]);
    assert.deepEqual(await rows(page), [drawn]);
    const text = await page
        .getByRole('slider', { name: 'Stretch shown above' })
        .getAttribute('aria-valuetext');
    const [from, to] = (text?.match(/[\d.]+/g) ?? []).map(Number);
    assert.ok(to - from < 8, String(text));
    const segment = await segmentShown(page);
    await page.getByRole('button', { name: 'Send marks' }).tap();
    await segmentShown(page, segment);
    const [review] = (await recordOf(page, 1)).reviews;
    near(review.marks[0].starts, drawn.starts, 1e-4);
    await close(page);
});

test('on a phone the chart, the loupe and both endings are in sight at once', async () => {
    const page = await it.page(PHONE);
    await enterAsGuest(page);
    for (const part of ['strip', 'loupe', 'overview', 'no-dips', 'send']) {
        const box = await page.locator(`[data-part="${part}"]`).boundingBox();
        assert.ok(
            box && box.y >= 0 && box.y + box.height <= 844,
            `${part} ends at ${box && box.y + box.height}`
        );
    }
    await close(page);
});

test('every button and field on a phone is at least 44 px high and wide', async () => {
    const page = await it.page(PHONE);
    await enterAsGuest(page);
    await fingers(page, [
        [
            [0.3, 0.3],
            [0.55, 0.6],
        ],
    ]);
    const small = await page.locator('button, input, select, .masthead a').evaluateAll((list) =>
        list
            .filter(
                (element) =>
                    /** @type {HTMLElement} */ (element).checkVisibility() &&
                    !element.closest('label.tick')
            )
            .map((element) => ({
                name: element.textContent || element.getAttribute('aria-label'),
                box: element.getBoundingClientRect(),
            }))
            .filter(({ box }) => box.width < 44 || box.height < 44)
            .map(({ name, box }) => `${name} ${box.width} x ${box.height}`)
    );
    assert.deepEqual(small, []);
    await close(page);
});

test('without a connection a review waits, is said to wait, and is sent when it is back', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await page.waitForLoadState('networkidle');
    await page.context().setOffline(true);
    const segment = await segmentShown(page);
    await page.getByRole('button', { name: 'No dips here' }).click();
    await page.getByRole('button', { name: '1 waiting to send' }).waitFor();
    await segmentShown(page, segment);
    await page.context().setOffline(false);
    await page.getByRole('button', { name: 'waiting to send' }).waitFor({ state: 'hidden' });
    const [review] = (await recordOf(page, 1)).reviews;
    assert.deepEqual(review.marks, []);
    await close(page);
});

test('a review that waits outlives a reload, and is sent once', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await page.route('**/api/v1/reviews', (route) => route.abort());
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    const [drawn] = await rows(page);
    await page.getByRole('button', { name: 'Send marks' }).click();
    await page.getByRole('button', { name: '1 waiting to send' }).waitFor();
    await page.waitForFunction(
        () =>
            new Promise((resolve) => {
                const request = indexedDB.open('ebbmark');
                request.onsuccess = () => {
                    const all = request.result
                        .transaction('waiting-reviews')
                        .objectStore('waiting-reviews')
                        .count();
                    all.onsuccess = () => resolve(all.result === 1);
                };
            })
    );
    assert.equal((await record(page)).reviews.length, 0);
    await page.unroute('**/api/v1/reviews');
    await page.reload();
    await segmentShown(page);
    const [review] = (await recordOf(page, 1)).reviews;
    near(review.marks[0].starts, drawn.starts, 1e-4);
    await page.reload();
    await segmentShown(page);
    assert.equal((await record(page)).reviews.length, 1);
    await close(page);
});

test('a reload in the middle of a look brings back the same segment with the same marks', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    await page.getByRole('button', { name: 'A break in the data' }).click();
    const before = { segment: await segmentShown(page), rows: await rows(page) };
    await page.reload();
    assert.equal(await segmentShown(page), before.segment);
    assert.deepEqual(await rows(page), before.rows);
    assert.equal(
        await page
            .getByRole('button', { name: 'A break in the data' })
            .getAttribute('aria-pressed'),
        'true'
    );
    await close(page);
});

test('the help is one key away, gives the focus back, and its key can be switched off', async () => {
    const page = await it.page();
    await enterAsGuest(page);
    await page.locator('[data-part="strip"]').focus();
    await page.keyboard.press('?');
    const help = page.getByRole('dialog', { name: 'How to look' });
    await help.waitFor();
    await help.getByLabel(/The key \? opens/).uncheck();
    await page.keyboard.press('Escape');
    await help.waitFor({ state: 'hidden' });
    assert.equal(
        await page.evaluate(() => document.activeElement?.getAttribute('data-part')),
        'strip'
    );
    await page.getByRole('button', { name: 'Undo' }).focus();
    await page.keyboard.press('?');
    await page.waitForTimeout(200);
    assert.equal(await help.isVisible(), false);
    await close(page);
});

test('nothing is drawn while nothing changes', async () => {
    const page = await it.page();
    await page.addInitScript(() => {
        const ask = window.requestAnimationFrame.bind(window);
        /** @type {any} */ (window).frames_asked = 0;
        window.requestAnimationFrame = (run) => {
            /** @type {any} */ (window).frames_asked++;
            return ask(run);
        };
    });
    await enterAsGuest(page);
    await page.waitForTimeout(500);
    const before = await page.evaluate(() => /** @type {any} */ (window).frames_asked);
    await page.waitForTimeout(700);
    assert.equal(await page.evaluate(() => /** @type {any} */ (window).frames_asked), before);
    await close(page);
});

test('at night the chart still prints in dark ink', async () => {
    const page = await it.page({ ...DESKTOP, colorScheme: 'dark' });
    await enterAsGuest(page);
    const darkest = () =>
        page.locator('[data-part="strip-points"]').evaluate((element) => {
            const canvas = /** @type {HTMLCanvasElement} */ (element);
            const { data } = /** @type {CanvasRenderingContext2D} */ (
                canvas.getContext('2d')
            ).getImageData(0, 0, canvas.width, canvas.height);
            let least = 255;
            for (let at = 0; at < data.length; at += 4)
                if (data[at + 3] > 250) least = Math.min(least, data[at]);
            return least;
        });
    assert.ok((await darkest()) > 20);
    await page.emulateMedia({ media: 'print', colorScheme: 'dark' });
    await page.waitForFunction(() => matchMedia('print').matches);
    assert.equal(await darkest(), 0);
    await close(page);
});
