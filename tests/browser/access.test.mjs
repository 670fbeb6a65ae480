/** Every page by WCAG 2.2 AA, light and night, wide and narrow, in forced colours and on paper. */
import assert from 'node:assert/strict';
import { createRequire } from 'node:module';
import { readFile } from 'node:fs/promises';
import test from 'node:test';
import {
    bench,
    close,
    DESKTOP,
    drag,
    enterAsGuest,
    fingers,
    PHONE,
    segmentShown,
    signInAsScience,
} from './bench.mjs';

const it = bench();
const axe = await readFile(createRequire(import.meta.url).resolve('axe-core/axe.min.js'), 'utf8');
const RULES = ['wcag2a', 'wcag2aa', 'wcag21a', 'wcag21aa', 'wcag22aa'];

/** @param {import('playwright-core').Page} page everything axe finds, serious or not */
async function faults(page) {
    await page.evaluate(axe);
    const found = await page.evaluate(
        (rules) =>
            /** @type {any} */ (window).axe.run(document, {
                runOnly: { type: 'tag', values: rules },
                resultTypes: ['violations'],
            }),
        RULES
    );
    return found.violations.flatMap((/** @type {any} */ rule) =>
        rule.nodes.map(
            (/** @type {any} */ node) =>
                `${rule.impact} ${rule.id}: ${node.target.join(' ')} ${node.failureSummary}`
        )
    );
}

/** @param {import('playwright-core').Page} page does anything reach past the side of the page? */
async function sideways(page) {
    return page.evaluate(
        () => document.documentElement.scrollWidth - document.documentElement.clientWidth
    );
}

/** @typedef {(page: import('playwright-core').Page) => Promise<void>} Way */
/** @type {Record<string, Way>} each page in a state worth checking */
const PAGES = {
    'the first page': async (page) => {
        await page.goto('/');
        await page.getByRole('button', { name: 'Join' }).waitFor();
    },
    'the Desk with marks': async (page) => {
        await enterAsGuest(page);
        const touch = await page.evaluate(() => navigator.maxTouchPoints > 0);
        if (touch) {
            await fingers(page, [
                [
                    [0.3, 0.3],
                    [0.45, 0.5],
                ],
            ]);
            await fingers(page, [
                [
                    [0.6, 0.3],
                    [0.8, 0.5],
                ],
            ]);
        } else {
            await drag(page, [0.3, 0.3], [0.33, 0.5]);
            await drag(page, [0.6, 0.3], [0.8, 0.5]);
        }
        await page.getByRole('button', { name: 'Keeps changing' }).click();
    },
    'the help sheet': async (page) => {
        await enterAsGuest(page);
        await page.locator('[data-part="help-open"]').click();
        await page.getByRole('dialog').waitFor();
    },
    'My record': async (page) => {
        await enterAsGuest(page);
        const segment = await segmentShown(page);
        await page.getByRole('button', { name: 'No dips here' }).click();
        await segmentShown(page, segment);
        await page.getByRole('button', { name: 'waiting to send' }).waitFor({ state: 'hidden' });
        await page.goto('/record');
        await page.getByText('No dips', { exact: true }).waitFor();
    },
    Candidates: async (page) => {
        await signInAsScience(page);
        await page.locator('[data-part="rows"] tr').first().waitFor();
    },
    'the closer look': async (page) => {
        await signInAsScience(page);
        await page.locator('[data-part="rows"] button').first().click();
        await page.locator('[data-part="closer-marks"] li').first().waitFor();
    },
    'Candidates for a reviewer': async (page) => {
        await enterAsGuest(page);
        await page.goto('/candidates');
        await page.getByText('for the science team').waitFor();
    },
};

for (const [name, way] of Object.entries(PAGES)) {
    test(`axe finds nothing on ${name}, light and night`, async () => {
        const page = await it.page();
        await way(page);
        assert.deepEqual(await faults(page), []);
        await page.emulateMedia({ colorScheme: 'dark' });
        assert.deepEqual(await faults(page), []);
        await close(page);
    });
    test(`axe finds nothing on ${name}, on a phone`, async () => {
        const page = await it.page(PHONE);
        await way(page);
        assert.deepEqual(await faults(page), []);
        await close(page);
    });
}

test('axe, as it is used here, finds what is wrong on purpose', async () => {
    const page = await it.page();
    await PAGES['the first page'](page);
    await page.evaluate(() => {
        const main = /** @type {HTMLElement} */ (document.querySelector('main'));
        main.append(
            document.createElement('button'),
            Object.assign(document.createElement('p'), { textContent: 'hard to read' })
        );
        /** @type {HTMLElement} */ (main.lastElementChild).style.color = '#d8d0bd';
    });
    const found = await faults(page);
    for (const rule of ['button-name', 'color-contrast'])
        assert.ok(
            found.some((/** @type {string} */ text) => text.includes(rule)),
            rule
        );
    await close(page);
});

for (const [name, way] of Object.entries(PAGES))
    test(`${name} fits 320 px and 4K without going sideways`, async () => {
        for (const viewport of [
            { width: 320, height: 640 },
            { width: 3840, height: 2160 },
        ]) {
            const page = await it.page({ viewport });
            await way(page);
            assert.ok(
                (await sideways(page)) <= 0,
                `${viewport.width} px: ${await sideways(page)} px too wide`
            );
            await close(page);
        }
    });

test('in forced colours a pressed button still looks pressed', async () => {
    const page = await it.page({ ...DESKTOP, forcedColors: 'active' });
    await enterAsGuest(page);
    const look = (/** @type {string} */ name) =>
        page.getByRole('button', { name }).evaluate((button) => {
            const { textDecorationLine, borderStyle, borderWidth, backgroundColor } =
                getComputedStyle(button);
            return JSON.stringify([textDecorationLine, borderStyle, borderWidth, backgroundColor]);
        });
    assert.notEqual(await look('As measured'), await look('Trend removed'));
    await close(page);
});

test('marks differ from consensus by more than colour: the two are hatched to opposite sides', async () => {
    const page = await it.page();
    await page.goto('/');
    const slants = await page.evaluate(async () => {
        const { hatch } = await import(/** @type {any} */ ('/paper.js'));
        return [1, -1].map((slant) => {
            const canvas = document.createElement('canvas');
            canvas.width = canvas.height = 40;
            const pen = /** @type {CanvasRenderingContext2D} */ (canvas.getContext('2d'));
            hatch(pen, { left: 0, top: 0, width: 40, height: 40 }, 40, slant);
            const dark = (/** @type {number} */ x, /** @type {number} */ y) =>
                pen.getImageData(x, y, 1, 1).data[3] > 60;
            return [dark(10, 30) || dark(10, 29), dark(10, 10) || dark(10, 9)];
        });
    });
    assert.deepEqual(slants, [
        [true, false],
        [false, true],
    ]);
    await close(page);
});

test('the record prints without buttons and in black on white', async () => {
    const page = await it.page();
    await PAGES['My record'](page);
    await page.emulateMedia({ media: 'print' });
    assert.equal(await page.getByRole('button', { name: 'Sign out' }).isVisible(), false);
    assert.equal(await page.locator('[data-part="review-rows"]').isVisible(), true);
    assert.equal(
        await page.evaluate(() => getComputedStyle(document.documentElement).color),
        'rgb(0, 0, 0)'
    );
    await close(page);
});
