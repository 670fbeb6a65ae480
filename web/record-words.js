/** The sentences of My record. Pure. */
import * as format from './format.js';

/** @typedef {import('./api.js').Interval} Interval */

/** @param {Interval} rate */
const between = (rate) => `${format.fixed(rate.low * 100, 0)} to ${format.percent(rate.high)}`;

/** @param {{value: unknown, low: unknown, high: unknown} | null | undefined} rate */
const known = (rate) =>
    rate !== null &&
    rate !== undefined &&
    [rate.value, rate.low, rate.high].every((value) => typeof value === 'number');

/**
 * What is known of a reviewer, with its interval, in one sentence.
 * @param {{hit: Interval, chance: Interval} | null} skill
 */
export function skillSentence(skill) {
    if (skill === null || !known(skill.hit))
        return (
            'Not known yet: it takes some looks at segments that others looked at too, and a ' +
            'consensus run after them.'
        );
    const hit =
        `By the latest estimate you mark about ${format.percent(skill.hit.value)} of ` +
        `the dips of middling strength (SNR 10) that you are shown (90 % interval: ` +
        `${between(skill.hit)})`;
    if (!known(skill.chance)) return `${hit}.`;
    return (
        `${hit}, and about ${format.percent(skill.chance.value)} of the places that others ` +
        `marked but that are no dip (${between(skill.chance)}).`
    );
}

/** @param {{starts: number, ends: number, low: number, high: number, certainty: string}} mark */
export function markSentence(mark) {
    const span = `${format.time(mark.starts)} to ${format.time(mark.ends)}`;
    const size =
        `${format.hours(mark.ends - mark.starts)}\u00a0h, ` +
        `${format.fixed((mark.high - mark.low) * 100, 2)}\u00a0% deep`;
    return `${span} (${size}${mark.certainty === 'unsure' ? ', unsure' : ''})`;
}

/** @param {readonly string[]} conditions @param {boolean} late */
export function asideSentence(conditions, late) {
    const words = [];
    if (conditions.includes('break')) words.push('a break in the data');
    if (conditions.includes('keeps_changing')) words.push('keeps changing');
    if (late) words.push('came late, still taken');
    return words.join('; ');
}
