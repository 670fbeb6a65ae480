/**
 * Reads the packed form of a segment's flux (application/vnd.ebbmark.flux). Pure; the body is
 * taken as hostile input: whatever is wrong with it ends in a FluxError with a sentence.
 */

/**
 * @typedef {object} Flux
 * @property {number} reference    days; times are already counted from zero of the segment's system
 * @property {number} medianFlux   what 1 stands for, in the units of the file it came from
 * @property {number} noise        scatter from point to point, relative; 0 when not known
 * @property {Float64Array} times  days, not decreasing
 * @property {Float64Array} flux   relative, about 1
 */

const HEAD_BYTES = 32;
const POINTS_MOST = 5_000_000;
const MAGIC = [0x45, 0x42, 0x46, 0x31];

export class FluxError extends Error {
    name = 'FluxError';
}

/**
 * @param {boolean} good
 * @param {string} sentence
 */
function insist(good, sentence) {
    if (!good) throw new FluxError(`This light curve cannot be shown: ${sentence}.`);
}

/**
 * @param {ArrayBuffer} body
 * @returns {Flux}
 */
export function readFlux(body) {
    insist(body.byteLength >= HEAD_BYTES, 'it is shorter than its own heading');
    const data = new DataView(body);
    insist(
        MAGIC.every((byte, at) => data.getUint8(at) === byte),
        'it is of another kind'
    );
    const count = data.getUint32(4, true);
    insist(count <= POINTS_MOST, `it claims ${count} points, which is too many`);
    insist(body.byteLength === HEAD_BYTES + 8 * count, 'its length does not fit its points');
    const reference = data.getFloat64(8, true);
    const medianFlux = data.getFloat64(16, true);
    const noise = data.getFloat32(24, true);
    insist(Number.isFinite(reference), 'its reference time is not a number');
    insist(Number.isFinite(medianFlux), 'its median flux is not a number');
    insist(!(noise < 0) && noise !== Infinity, 'its noise makes no sense');

    const times = new Float64Array(count);
    const flux = new Float64Array(count);
    let before = -Infinity;
    for (let at = 0; at < count; at++) {
        const time = reference + data.getFloat32(HEAD_BYTES + 4 * at, true);
        const value = 1 + data.getFloat32(HEAD_BYTES + 4 * (count + at), true);
        insist(Number.isFinite(time) && time >= before, `the time of point ${at + 1} is wrong`);
        insist(Number.isFinite(value), `the flux of point ${at + 1} is not a number`);
        times[at] = time;
        flux[at] = value;
        before = time;
    }
    return { reference, medianFlux, noise: Number.isNaN(noise) ? 0 : noise, times, flux };
}

/**
 * The usual step between points, in days: the median of all steps.
 * @param {ArrayLike<number>} times
 */
export function usualStep(times) {
    if (times.length < 2) return 0;
    const steps = new Float64Array(times.length - 1);
    for (let at = 1; at < times.length; at++) steps[at - 1] = times[at] - times[at - 1];
    steps.sort();
    return steps[steps.length >> 1];
}

/**
 * Stretches without data: more than half a day or ten cadences, whichever is longer.
 * @param {ArrayLike<number>} times
 * @param {number} step the usual step, days
 * @returns {{starts: number, ends: number}[]}
 */
export function gaps(times, step) {
    const least = Math.max(0.5, 10 * step);
    const found = [];
    for (let at = 1; at < times.length; at++)
        if (times[at] - times[at - 1] > least)
            found.push({ starts: times[at - 1], ends: times[at] });
    return found;
}
