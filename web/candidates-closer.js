/** A closer look at one candidate: its light curve, who marked it, why it stands where it does. */
import * as api from './api.js';
import { atWork, el, part as byPart, say, sentence } from './dom.js';
import * as format from './format.js';
import { timeToX } from './geometry.js';
import { inksNow } from './paper.js';
import { curveOf, drawThumbnail, stretchOf } from './thumbnail.js';

const BAR = 9;
const BARS_MOST = 15;
/**
 * What the flags mean; one that is not listed is shown by its name.
 * @type {Record<string, string>}
 */
const FLAGS = {
    near_gap: 'An edge of the dip lies within half its duration of a gap.',
    little_data: 'Less than half of the dip is covered by data.',
    v_shaped: 'The dip has no flat bottom, as a grazing or eclipsing binary would.',
    not_measured: 'Nothing could be measured at this place.',
    brightening: 'The flux rises here instead of falling.',
    lopsided: 'The two halves of the dip differ much.',
};

/** @param {string | null} flags names with blanks between */
export const flagSentences = (flags) =>
    (flags ?? '')
        .split(' ')
        .filter((name) => name !== '')
        .map((name) => FLAGS[name] ?? name);

/**
 * Why the probability is what it is: the parts of the log-odds.
 * @param {{looks: number | null, time: number | null, snr: number | null, prior: number | null}}
 * terms
 * @param {number | null} logOdds
 */
export function termsSentence(terms, logOdds) {
    /** @type {[string, number | null][]} */
    const parts = [
        ['who marked and who did not', terms.looks],
        ['agreement in time', terms.time],
        ['the measured SNR', terms.snr],
        ['how common dips are', terms.prior],
    ];
    const said = parts
        .filter(([, value]) => typeof value === 'number')
        .map(([name, value]) => `${name} ${signed(/** @type {number} */ (value))}`);
    if (said.length === 0) return '';
    const sum = typeof logOdds === 'number' ? `, together ${signed(logOdds)}` : '';
    return `The natural logarithm of its odds: ${said.join(', ')}${sum}.`;
}

/** @param {number} value */
const signed = (value) => (value >= 0.005 ? '+' : '') + format.fixed(value, 2);

/** @param {any} mark */
function markItem(mark) {
    const who = mark.handle ?? `reviewer ${mark.person}`;
    const weight =
        typeof mark.weight === 'number' ? `, weight ${format.fixed(mark.weight, 2)}` : '';
    const span = `${format.time(mark.starts)} to ${format.time(mark.ends)}`;
    return el('li', {}, `${who}: ${span}, ${mark.certainty}${weight}`);
}

/** @param {any} verdict */
function verdictItem(verdict) {
    const note = verdict.note ? `: ${verdict.note}` : '';
    return el(
        'li',
        {},
        `${verdict.verdict} by ${verdict.handle ?? 'somebody who left'}, ` +
            `${format.moment(verdict.given)}${note}`
    );
}

/** @param {{onVerdict: () => void}} options */
export function makeCloser({ onVerdict }) {
    const dialog = /** @type {HTMLDialogElement} */ (byPart('closer'));
    const canvas = /** @type {HTMLCanvasElement} */ (byPart('closer-canvas'));
    const note = /** @type {HTMLInputElement} */ (byPart('verdict-note'));
    let shown = 0;

    for (const button of dialog.querySelectorAll('button[data-verdict]'))
        button.addEventListener('click', () =>
            atWork(
                /** @type {HTMLButtonElement} */ (button),
                byPart('verdict-trouble'),
                async () => {
                    const verdict = /** @type {HTMLElement} */ (button).dataset.verdict ?? '';
                    await api.giveVerdict(shown, { verdict, note: note.value.trim() });
                    note.value = '';
                    await fill(shown);
                    onVerdict();
                }
            )
        );
    byPart('verdict-form').addEventListener('submit', (event) => event.preventDefault());

    /** Marks as thin bars under the curve, stronger for more weight.
     * @param {any} one */
    async function draw(one) {
        const bars = Math.min(one.marked_by.length, BARS_MOST) * BAR;
        const drawn = drawThumbnail(canvas, await curveOf(one), one, inksNow(), bars + 6);
        if (drawn === null) return;
        const { paper, plot, view } = drawn;
        const inks = inksNow();
        paper.pen.fillStyle = inks.consensus;
        one.marked_by
            .slice(0, BARS_MOST)
            .forEach((/** @type {any} */ mark, /** @type {number} */ at) => {
                const left = timeToX(view, plot, mark.starts);
                const wide = Math.max(timeToX(view, plot, mark.ends) - left, 2);
                paper.pen.globalAlpha = 0.35 + 0.65 * Math.min(1, Math.max(0, mark.weight ?? 0));
                paper.pen.fillRect(left, plot.top + plot.height + 6 + at * BAR, wide, BAR - 3);
            });
        paper.pen.globalAlpha = 1;
    }

    /** @param {number} id */
    async function fill(id) {
        const one = await api.candidate(id);
        const span = stretchOf(one);
        say(byPart('closer-title'), `Candidate ${one.candidate}, star ${one.star}`);
        say(byPart('closer-caution'), one.caution);
        say(
            byPart('closer-axis'),
            `Days ${format.fixed(span.t0, 2)} to ${format.fixed(span.t1, 2)}, ` +
                `${one.time_reference.replace(' - ', ' \u2212 ')}; trend removed. Hatched: the ` +
                'candidate. Bars: each reviewer’s mark, stronger for more weight.'
        );
        const why = [
            `Probability ${format.probability(one.probability)}.`,
            termsSentence(one.terms ?? {}, one.log_odds),
            ...flagSentences(one.flags),
        ];
        say(byPart('closer-why'), why.filter((text) => text !== '').join(' '));
        byPart('closer-marks').replaceChildren(...one.marked_by.map(markItem));
        const verdicts = one.verdicts.map(verdictItem);
        byPart('closer-verdicts').replaceChildren(
            ...(verdicts.length > 0 ? verdicts : [el('li', {}, 'None yet.')])
        );
        for (const button of dialog.querySelectorAll('button[data-verdict]'))
            button.setAttribute(
                'aria-pressed',
                String(/** @type {HTMLElement} */ (button).dataset.verdict === (one.verdict ?? ''))
            );
        await draw(one);
    }

    return {
        /** @param {number} id */
        async open(id) {
            shown = id;
            say(byPart('verdict-trouble'), '');
            dialog.showModal();
            try {
                await fill(id);
            } catch (error) {
                say(byPart('verdict-trouble'), sentence(error));
            }
        },
    };
}
