/**
 * The Desk when the server fails, or says what only a staged server says at will. These always run
 * against the mock.
 */
import assert from 'node:assert/strict';
import { after, test } from 'node:test';
import { bench, close, drag, enterAsGuest, rows, segmentShown } from './bench.mjs';
import { startMock } from './mock.mjs';

const it = bench();
/** @type {Awaited<ReturnType<typeof startMock>>[]} */
const mocks = [];
after(() => Promise.all(mocks.map((mock) => mock.stop())));

/** A page before a mock of its own. @param {Parameters<typeof startMock>[0]} [options] */
async function staged(options) {
    const mock = await startMock(options);
    mocks.push(mock);
    it.address = mock.address;
    const page = await it.page();
    return { mock, page };
}

/** @param {import('playwright-core').Page} page */
const noDips = (page) => page.getByRole('button', { name: 'No dips here' }).click();
/** @param {import('playwright-core').Page} page */
const sent = (page) =>
    page.getByRole('button', { name: 'waiting to send' }).waitFor({ state: 'hidden' });

test('after 503 with Retry-After the review is sent again, not before its time, with the same key', async () => {
    const { mock, page } = await staged();
    await enterAsGuest(page);
    /** @type {number[]} */
    const times = [];
    /** @type {Set<string>} */
    const keys = new Set();
    page.on('request', (request) => {
        if (!/\/reviews$/.test(request.url())) return;
        times.push(Date.now());
        keys.add(request.headers()['idempotency-key']);
    });
    mock.fault = (_method, path) =>
        path === '/reviews' && times.length < 2
            ? {
                  status: 503,
                  kind: 'overloaded',
                  detail: 'Too much is waiting.',
                  headers: { 'Retry-After': '2' },
              }
            : null;
    await noDips(page);
    await page.getByRole('button', { name: '1 waiting to send' }).click();
    await page.getByText(/Too much is waiting\. Trying again in \d seconds?\./).waitFor();
    await page.keyboard.press('Escape');
    await sent(page);
    assert.equal(mock.reviews.length, 1);
    assert.equal(keys.size, 1);
    assert.ok(times[1] - times[0] >= 1800, `${times[1] - times[0]} ms`);
    await close(page);
});

test('a review whose answer was lost on the way is stored once', async () => {
    const { mock, page } = await staged();
    await enterAsGuest(page);
    let losses = 0;
    mock.fault = (_method, path) => (path === '/reviews' && losses++ < 2 ? { lose: true } : null);
    await noDips(page);
    await sent(page);
    assert.equal(mock.reviews.length, 1);
    assert.ok(losses >= 3);
    await close(page);
});

test('whoever is no longer known in mid-send signs in again, and the review is sent then', async () => {
    const { mock, page } = await staged();
    await page.goto('/');
    const join = page.locator('form', { has: page.getByRole('button', { name: 'Join' }) });
    await join.getByLabel('Handle').fill('curlew');
    await join.getByLabel('Passphrase').fill('low water at noon');
    await join.getByRole('button', { name: 'Join' }).click();
    await segmentShown(page);
    await page.waitForLoadState('networkidle');
    mock.endSessions();
    await drag(page, [0.4, 0.3], [0.5, 0.6]);
    await page.getByRole('button', { name: 'Send marks' }).click();
    const again = page.getByRole('dialog', { name: 'Sign in again' });
    await again.waitFor();
    assert.equal(await again.getByLabel('Handle').inputValue(), 'curlew');
    await again.getByLabel('Passphrase').fill('low water at noon');
    await again.getByRole('button', { name: 'Sign in' }).click();
    await sent(page);
    assert.equal(mock.reviews.length, 1);
    assert.equal(mock.reviews[0].marks.length, 1);
    await segmentShown(page);
    await close(page);
});

test('a review that cannot be taken any more is told, and the next look goes on', async () => {
    const { mock, page } = await staged();
    await enterAsGuest(page);
    mock.fault = (_method, path) =>
        path === '/reviews'
            ? { status: 409, kind: 'expired_lease', detail: 'The segment is settled.' }
            : null;
    const segment = await segmentShown(page);
    await noDips(page);
    await page.getByText(/was not taken\. The segment is settled\./).waitFor();
    await segmentShown(page, segment);
    await sent(page);
    await close(page);
});

test('a control says at once what had been put there, and nothing else ever speaks of others', async () => {
    const { mock, page } = await staged();
    mock.control = (review) =>
        review.review === 1
            ? {
                  kind: 'injected',
                  dips: [
                      { starts: review.marks[0].starts, ends: review.marks[0].ends, found: true },
                  ],
              }
            : undefined;
    await enterAsGuest(page);
    await drag(page, [0.4, 0.3], [0.45, 0.6]);
    const [drawn] = await rows(page);
    const segment = await segmentShown(page);
    await page.getByRole('button', { name: 'Send marks' }).click();
    const slip = page.locator('[data-part="slip"]');
    await slip.getByText(/was a control: a model dip had been put into it/).waitFor();
    assert.ok(
        (await slip.textContent())?.includes(
            `${drawn.starts.toFixed(4)} to ${drawn.ends.toFixed(4)} (you found it)`
        )
    );
    await segmentShown(page, segment);
    await noDips(page);
    await slip.waitFor({ state: 'hidden' });
    await close(page);
});

test('when nothing is left it says so calmly, and looks again when asked', async () => {
    const { mock, page } = await staged({ segments: 1 });
    await enterAsGuest(page);
    await noDips(page);
    await page.getByRole('heading', { name: 'Nothing is left to look at' }).waitFor();
    await sent(page);
    mock.sheets.push({ ...mock.sheets[0], id: 'eb00000000000abc' });
    await page.getByRole('button', { name: 'Look again' }).click();
    await segmentShown(page);
    await close(page);
});

test('a server that cannot be reached is said so, and tried again when the connection is back', async () => {
    const { mock, page } = await staged();
    await enterAsGuest(page);
    await page.waitForLoadState('networkidle');
    mock.fault = () => ({ cut: true });
    const segment = await segmentShown(page);
    await noDips(page);
    await segmentShown(page, segment);
    await noDips(page);
    await page.getByRole('heading', { name: 'The next segment could not be fetched' }).waitFor();
    await page.getByRole('button', { name: '2 waiting to send' }).waitFor();
    mock.fault = () => null;
    await page.evaluate(() => window.dispatchEvent(new Event('online')));
    await sent(page);
    await segmentShown(page);
    assert.equal(mock.reviews.length, 2);
    await close(page);
});

test('a light curve that makes no sense is said to, and the Desk stays whole', async () => {
    const { page } = await staged();
    await page.route('**/flux?**', (route) =>
        route.fulfill({ status: 200, body: 'EBF1 and then nonsense, of any length at all' })
    );
    await page.goto('/desk');
    await page.getByRole('button', { name: 'Look around as a guest' }).click();
    await page.getByText(/This light curve cannot be shown/).waitFor();
    await page.unroute('**/flux?**');
    await page.getByRole('button', { name: 'Try again' }).click();
    await segmentShown(page);
    await close(page);
});

test('a handle full of markup is shown as text', async () => {
    const { mock, page } = await staged();
    await page.goto('/');
    const handle = '<img src=x onerror=alert(1)>';
    const join = page.locator('form', { has: page.getByRole('button', { name: 'Join' }) });
    await join.getByLabel('Handle').fill(handle);
    await join.getByLabel('Passphrase').fill('low water at noon');
    await join.getByRole('button', { name: 'Join' }).click();
    await segmentShown(page);
    assert.equal(await page.locator('[data-part="who"]').textContent(), handle);
    assert.equal(await page.locator('img').count(), 0);
    assert.ok(mock.people.size === 2);
    await close(page);
});

test('twenty thousand points are panned and drawn over in time for the eye', async () => {
    const { page } = await staged({ segments: 3, points: 22_000, days: 27 });
    await enterAsGuest(page);
    assert.match(
        String(await page.locator('[data-part="subtitle"]').textContent()),
        /^2\d,\d{3} points/
    );
    await page.getByRole('button', { name: 'Zoom in' }).click();
    const took = await page.evaluate(async () => {
        const grip = /** @type {HTMLElement} */ (document.querySelector('[data-part="window"]'));
        /** @type {number[]} */
        const times = [];
        for (let frame = 0; frame < 40; frame++) {
            const key = frame % 2 ? 'ArrowLeft' : 'ArrowRight';
            await new Promise((resolve) => requestAnimationFrame(resolve));
            grip.dispatchEvent(new KeyboardEvent('keydown', { key, bubbles: true }));
            const began = performance.now();
            await new Promise((resolve) => {
                requestAnimationFrame(() => resolve(undefined));
            });
            times.push(performance.now() - began);
        }
        return times.sort((a, b) => a - b)[20];
    });
    console.log(
        `# median of a frame with 20,000 points and more: ${took.toFixed(1)} ms (software drawing)`
    );
    assert.ok(took < 50, `a frame took ${took.toFixed(1)} ms`);
    await close(page);
});
