/** Small light curves about candidates, fetched when they come into sight, a few at a time. */
import { lightCurve } from './api.js';
import { drawPoints } from './draw-points.js';
import { fluxFit, timeToX } from './geometry.js';
import { hatch, paperOf } from './paper.js';

/** @typedef {{star: string, starts: number, ends: number, mid_time: number}} Place */
/** @typedef {{times: Float64Array, flux: Float64Array}} Curve */

const AT_ONCE = 3;
const KEPT_MOST = 400;

/**
 * The stretch shown about a candidate: four lengths to each side, at least half a day.
 * @param {Place} place
 */
export function stretchOf(place) {
    const half = Math.max(4.5 * (place.ends - place.starts), 0.5);
    return { t0: place.mid_time - half, t1: place.mid_time + half };
}

/**
 * Flux with the trend removed, from the answer of the server; points that are not numbers are left
 * out.
 * @param {{times: (number | null)[], flux: (number | null)[], trend: (number | null)[]}} answer
 * @returns {Curve}
 */
export function flattened(answer) {
    const times = [];
    const flux = [];
    for (let at = 0; at < answer.times.length; at++) {
        const [time, value] = [answer.times[at], answer.flux[at]];
        const level = answer.trend?.[at] ?? 1;
        if (typeof time !== 'number' || typeof value !== 'number' || !(level > 0)) continue;
        times.push(time);
        flux.push(value / level);
    }
    return { times: Float64Array.from(times), flux: Float64Array.from(flux) };
}

/** @type {Map<string, Promise<Curve>>} */
const fetched = new Map();
let atWork = 0;
/** @type {(() => void)[]} */
const waiting = [];

/** @param {Place} place @returns {Promise<Curve>} */
export function curveOf(place) {
    const { t0, t1 } = stretchOf(place);
    const key = `${place.star} ${t0} ${t1}`;
    const known = fetched.get(key);
    if (known) return known;
    const coming = turn().then(async () => {
        try {
            return flattened(await lightCurve(place.star, t0, t1));
        } catch (error) {
            fetched.delete(key);
            throw error;
        } finally {
            atWork--;
            waiting.shift()?.();
        }
    });
    fetched.set(key, coming);
    for (const old of [...fetched.keys()].slice(0, -KEPT_MOST)) fetched.delete(old);
    return coming;
}

/** Resolves when there is room for one more request. @returns {Promise<void>} */
async function turn() {
    while (atWork >= AT_ONCE)
        await new Promise((resolve) => waiting.push(() => resolve(undefined)));
    atWork++;
}

/**
 * The points, and the candidate's interval in teal.
 * @param {HTMLCanvasElement} canvas @param {Curve} curve @param {Place} place
 * @param {import('./paper.js').Inks} inks @param {number} [bars] room kept free below
 */
export function drawThumbnail(canvas, curve, place, inks, bars = 0) {
    const { width, height } = canvas.getBoundingClientRect();
    const paper = paperOf(canvas, width, height);
    if (paper === null) return null;
    const plot = { left: 1, top: 2, width: width - 2, height: height - 4 - bars };
    const span = stretchOf(place);
    const view = { ...span, ...fluxFit(curve.times, curve.flux, span) };
    const left = timeToX(view, plot, place.starts);
    const wide = Math.max(timeToX(view, plot, place.ends) - left, 2);
    paper.pen.strokeStyle = inks.consensus;
    paper.pen.lineWidth = 1;
    paper.pen.globalAlpha = 0.45;
    hatch(paper.pen, { left, top: plot.top, width: wide, height: plot.height }, 8, -1);
    paper.pen.globalAlpha = 1;
    paper.pen.strokeRect(left, plot.top, wide, plot.height);
    drawPoints(paper, inks, curve, view, plot, { dot: width > 400 ? 4 : 2.2 });
    return { paper, plot, view };
}
