/**
 * What the browser tests share: one Chromium, a server to speak to, and hands to work with.
 *
 * EBBMARK_URL names the server; its person of the science role is EBBMARK_SCIENCE_HANDLE with
 * EBBMARK_SCIENCE_PASSPHRASE. Without it the mock serves.
 */
import assert from 'node:assert/strict';
import { after, before } from 'node:test';
import { chromium } from 'playwright-core';
import { startMock } from './mock.mjs';

/** @typedef {import('playwright-core').Page} Page */
/** @typedef {import('playwright-core').BrowserContext} BrowserContext */
/** @typedef {import('playwright-core').BrowserContextOptions} Options */

export const REAL = process.env.EBBMARK_URL;
export const SCIENCE = {
    handle: process.env.EBBMARK_SCIENCE_HANDLE ?? 'keeper',
    passphrase: process.env.EBBMARK_SCIENCE_PASSPHRASE ?? 'tide table 1871',
};
export const DESKTOP = { viewport: { width: 1440, height: 900 } };
export const PHONE = {
    viewport: { width: 390, height: 844 },
    hasTouch: true,
    isMobile: true,
    deviceScaleFactor: 2,
};

/** A bench for one file of tests: browser and server start before it and stop after. */
export function bench() {
    const it = {
        address: REAL ?? '',
        browser: /** @type {import('playwright-core').Browser} */ (/** @type {unknown} */ (null)),
        /** @type {Awaited<ReturnType<typeof startMock>> | null} */
        mock: null,
        /** A page of its own context; what goes wrong in its scripts fails the test that closes it.
         * @param {Options} [options] */
        async page(options = DESKTOP) {
            const context = await it.browser.newContext({ ...options, baseURL: it.address });
            const page = await context.newPage();
            page.setDefaultTimeout(15_000);
            page.on('pageerror', (error) => wrong(page).push(String(error)));
            page.on('console', (message) => {
                if (/Content Security Policy|Refused to/.test(message.text()))
                    wrong(page).push(message.text());
            });
            return page;
        },
    };
    before(async () => {
        if (REAL === undefined) {
            it.mock = await startMock();
            it.address = it.mock.address;
        }
        it.browser = await chromium.launch({
            executablePath: '/usr/bin/chromium',
            args: [
                '--headless',
                '--no-sandbox',
                '--disable-gpu',
                '--disable-background-networking',
            ],
        });
    });
    after(async () => {
        await it.browser?.close();
        await it.mock?.stop();
    });
    return it;
}

/** @type {WeakMap<Page, string[]>} */
const faults = new WeakMap();
/** @param {Page} page */
function wrong(page) {
    const list = faults.get(page) ?? [];
    faults.set(page, list);
    return list;
}

/** Closes a page, and fails if its scripts had failed. @param {Page} page */
export async function close(page) {
    const list = wrong(page);
    await page.context().close();
    assert.deepEqual(list, []);
}

let people = 0;
/** A handle that nobody has. */
export const newHandle = () => `tern-${process.pid}-${Date.now() % 1e6}-${people++}`;

/** @param {Page} page */
export async function enterAsGuest(page) {
    await page.goto('/desk');
    await page.getByRole('button', { name: 'Look around as a guest' }).click();
    await segmentShown(page);
}

/**
 * Waits for a segment on the Desk.
 * @param {Page} page
 * @param {string} [other] one that it must not be any more
 */
export async function segmentShown(page, other = '') {
    await page.waitForFunction((old) => {
        const sheet = /** @type {HTMLElement | null} */ (
            document.querySelector('[data-part="sheet"]:not([hidden])')
        );
        return sheet !== null && (sheet.dataset.segment ?? old) !== old;
    }, other);
    return String(await page.locator('[data-part="sheet"]').getAttribute('data-segment'));
}

/** @param {Page} page */
export async function signInAsScience(page) {
    await page.goto('/candidates');
    await page.getByLabel('Handle').fill(SCIENCE.handle);
    await page.getByLabel('Passphrase').fill(SCIENCE.passphrase);
    await page.getByRole('button', { name: 'Sign in' }).click();
}

/** @param {Page} page the place of the chart on the page */
export async function chart(page) {
    const box = await page.locator('[data-part="strip"]').boundingBox();
    assert.ok(box);
    return {
        ...box,
        /** @param {number} across @param {number} down shares of the chart */
        at: (across, down) => ({ x: box.x + across * box.width, y: box.y + down * box.height }),
    };
}

/**
 * Drags the mouse over the chart.
 * @param {Page} page
 * @param {[number, number]} from
 * @param {[number, number]} to shares
 */
export async function drag(page, from, to) {
    const { at } = await chart(page);
    const [one, other] = [at(...from), at(...to)];
    await page.mouse.move(one.x, one.y);
    await page.mouse.down();
    await page.mouse.move((one.x + other.x) / 2, (one.y + other.y) / 2);
    await page.mouse.move(other.x, other.y, { steps: 4 });
    await page.mouse.up();
}

/**
 * Fingers over the chart: each takes a path of shares; all go down, move step by step and come up.
 * @param {Page} page @param {[number, number][][]} paths of equal length
 */
export async function fingers(page, paths) {
    const { at } = await chart(page);
    const session = await page.context().newCDPSession(page);
    const points = (/** @type {number} */ step) =>
        paths.map((path, id) => ({ ...at(...path[step]), id }));
    await session.send('Input.dispatchTouchEvent', { type: 'touchStart', touchPoints: points(0) });
    for (let step = 1; step < paths[0].length; step++)
        await session.send('Input.dispatchTouchEvent', {
            type: 'touchMove',
            touchPoints: points(step),
        });
    await session.send('Input.dispatchTouchEvent', { type: 'touchEnd', touchPoints: [] });
    await session.detach();
}

/** The rows of marks, as text. @param {Page} page */
export async function rows(page) {
    return page.locator('[data-part="marks"] tbody tr').evaluateAll((list) =>
        list.map((row) => {
            const [starts, ends, length, depth] = [...row.querySelectorAll('input')].map(
                (input) => input.value
            );
            return {
                starts: Number(starts),
                ends: Number(ends),
                length: Number(length),
                depth: Number(depth),
            };
        })
    );
}

/** What the server has of this page's person. @param {Page} page */
export async function record(page) {
    const answer = await page.request.get('/api/v1/me/record');
    assert.equal(answer.status(), 200);
    return answer.json();
}

/**
 * Waits until the server has so many reviews of this page's person.
 * @param {Page} page
 * @param {number} count
 */
export async function recordOf(page, count) {
    const until = Date.now() + 15_000;
    for (;;) {
        const all = await record(page);
        if (all.reviews.length >= count || Date.now() > until) {
            assert.equal(all.reviews.length, count);
            return all;
        }
        await page.waitForTimeout(100);
    }
}

/**
 * Presses Tab until the focus is on what the test looks for.
 * @param {Page} page
 * @param {(name: string) => boolean} wanted of the focused element's label or text
 */
export async function tabTo(page, wanted) {
    for (let press = 0; press < 80; press++) {
        await page.keyboard.press('Tab');
        const name = await page.evaluate(() => {
            const element = document.activeElement;
            return (
                element?.getAttribute('aria-label') ??
                element?.closest('label')?.textContent ??
                element?.textContent ??
                ''
            );
        });
        if (wanted(name.trim())) return;
    }
    assert.fail('Tab never came to what was looked for.');
}
