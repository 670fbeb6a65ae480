/**
 * Geometry of the charts: where a time and a flux lie on the paper, what a pointer touches, how a
 * window moves and how a box follows a drag. Pure: no drawing, no events, no state.
 */

/** @typedef {{left: number, top: number, width: number, height: number}} Plot in CSS pixels */
/** @typedef {{t0: number, t1: number}} Span days */
/** @typedef {{f0: number, f1: number}} Range relative flux */
/** @typedef {Span & Range} View what a plot shows */
/** @typedef {{starts: number, ends: number, low: number, high: number}} Box */
/**
 * Where on a box a pointer is: 'inside', an edge, or a corner as two edges.
 * @typedef {{time: 'starts'|'ends'|null, flux: 'low'|'high'|null}} Part
 */

/** @param {View} view @param {Plot} plot @param {number} time */
export const timeToX = (view, plot, time) =>
    plot.left + ((time - view.t0) / (view.t1 - view.t0)) * plot.width;
/** @param {View} view @param {Plot} plot @param {number} x */
export const xToTime = (view, plot, x) =>
    view.t0 + ((x - plot.left) / plot.width) * (view.t1 - view.t0);
/** @param {View} view @param {Plot} plot @param {number} flux */
export const fluxToY = (view, plot, flux) =>
    plot.top + ((view.f1 - flux) / (view.f1 - view.f0)) * plot.height;
/** @param {View} view @param {Plot} plot @param {number} y */
export const yToFlux = (view, plot, y) =>
    view.f1 - ((y - plot.top) / plot.height) * (view.f1 - view.f0);

/** @param {number} value @param {number} least @param {number} most */
export const clamp = (value, least, most) => Math.min(Math.max(value, least), most);

/**
 * A span moved (never resized, unless it is longer than the bounds) so that it lies within bounds.
 * @param {Span} span @param {Span} bounds
 * @returns {Span}
 */
export function spanWithin(span, bounds) {
    const length = Math.min(span.t1 - span.t0, bounds.t1 - bounds.t0);
    const t0 = clamp(span.t0, bounds.t0, bounds.t1 - length);
    return { t0, t1: t0 + length };
}

/**
 * Zoom about a time that stays where it is on the paper. factor > 1 shows less.
 * @param {Span} span @param {Span} bounds @param {number} factor @param {number} about
 * @param {number} least the shortest span allowed, days
 * @returns {Span}
 */
export function spanZoom(span, bounds, factor, about, least) {
    const whole = bounds.t1 - bounds.t0;
    const length = clamp((span.t1 - span.t0) / factor, Math.min(least, whole), whole);
    const share = (about - span.t0) / (span.t1 - span.t0);
    const t0 = about - share * length;
    return spanWithin({ t0, t1: t0 + length }, bounds);
}

/**
 * The span moved by as little as makes a time visible, with some air beside it.
 * @param {Span} span @param {Span} bounds @param {number} time
 * @returns {Span}
 */
export function spanShowing(span, bounds, time) {
    const air = 0.05 * (span.t1 - span.t0);
    if (time < span.t0 + air)
        return spanWithin({ t0: time - air, t1: time - air + span.t1 - span.t0 }, bounds);
    if (time > span.t1 - air)
        return spanWithin({ t0: time + air - (span.t1 - span.t0), t1: time + air }, bounds);
    return span;
}

/**
 * One edge of a span dragged to a time; the other stays.
 * @param {Span} span @param {Span} bounds @param {'t0'|'t1'} edge @param {number} to
 * @param {number} least
 * @returns {Span}
 */
export function spanEdge(span, bounds, edge, to, least) {
    return edge === 't0'
        ? { t0: clamp(to, bounds.t0, Math.max(bounds.t0, span.t1 - least)), t1: span.t1 }
        : { t0: span.t0, t1: clamp(to, Math.min(bounds.t1, span.t0 + least), bounds.t1) };
}

/**
 * Where two fingers put a span: what lay under each of them stays under it.
 * @param {Span} span at the beginning of the pinch
 * @param {[number, number]} from shares of the width (0…1) of the fingers then
 * @param {[number, number]} to the same now
 * @param {Span} bounds @param {number} least
 * @returns {Span}
 */
export function spanPinch(span, from, to, bounds, least) {
    const length = span.t1 - span.t0;
    const apart = Math.max(Math.abs(from[1] - from[0]), 0.02);
    const now = Math.max(Math.abs(to[1] - to[0]), 0.02);
    const whole = bounds.t1 - bounds.t0;
    const wanted = clamp((length * apart) / now, Math.min(least, whole), whole);
    const middle = span.t0 + ((from[0] + from[1]) / 2) * length;
    const t0 = middle - ((to[0] + to[1]) / 2) * wanted;
    return spanWithin({ t0, t1: t0 + wanted }, bounds);
}

/**
 * Index of the first time that is not before `time`; times.length when there is none.
 * @param {ArrayLike<number>} times increasing @param {number} time
 */
export function firstAt(times, time) {
    let low = 0;
    let high = times.length;
    while (low < high) {
        const middle = (low + high) >> 1;
        if (times[middle] < time) low = middle + 1;
        else high = middle;
    }
    return low;
}

/**
 * Index of the point nearest in time, or -1 when there are no points.
 * @param {ArrayLike<number>} times @param {number} time
 */
export function nearestAt(times, time) {
    const after = firstAt(times, time);
    if (after === 0) return times.length > 0 ? 0 : -1;
    if (after === times.length) return after - 1;
    return time - times[after - 1] <= times[after] - time ? after - 1 : after;
}

/**
 * The flux range that shows every point of [t0, t1], low and high, with some air. A span without
 * points shows 1 ± 0.001.
 * @param {ArrayLike<number>} times @param {ArrayLike<number>} flux @param {Span} span
 * @returns {Range}
 */
export function fluxFit(times, flux, span) {
    let f0 = Infinity;
    let f1 = -Infinity;
    for (let at = firstAt(times, span.t0); at < times.length && times[at] <= span.t1; at++) {
        if (flux[at] < f0) f0 = flux[at];
        if (flux[at] > f1) f1 = flux[at];
    }
    if (f0 > f1) return { f0: 0.999, f1: 1.001 };
    const air = Math.max(0.08 * (f1 - f0), 1e-6);
    return { f0: f0 - air, f1: f1 + air };
}

/**
 * A range stretched about a flux. factor > 1 shows less.
 * @param {Range} range @param {number} factor @param {number} about
 * @returns {Range}
 */
export function rangeZoom(range, factor, about) {
    return { f0: about - (about - range.f0) / factor, f1: about + (range.f1 - about) / factor };
}

/**
 * Steps and first mark of an axis: multiples of 1, 2 or 5 times a power of ten.
 * @param {number} from @param {number} to @param {number} most how many marks there may be
 * @returns {{values: number[], step: number, decimals: number}}
 */
export function ticks(from, to, most) {
    if (!(to > from) || !(most >= 1)) return { values: [], step: 0, decimals: 0 };
    const rough = (to - from) / most;
    const power = 10 ** Math.floor(Math.log10(rough));
    const times = [1, 2, 5, 10].find((multiple) => multiple * power >= rough) ?? 10;
    const step = times * power;
    const decimals = Math.max(0, -Math.floor(Math.log10(step) + 1e-9));
    const values = [];
    for (let at = Math.ceil(from / step - 1e-9); at * step <= to + step * 1e-9; at++)
        values.push(at * step);
    return { values, step, decimals };
}

/**
 * What part of a box lies under (x, y), or null. `reach` is how far from an edge still counts; in a
 * box too narrow or flat for it, the middle third stays 'inside' so that it can be moved.
 * @param {View} view @param {Plot} plot @param {Box} box @param {number} x @param {number} y
 * @param {number} reach CSS pixels
 * @returns {Part | null}
 */
export function partUnder(view, plot, box, x, y, reach) {
    const left = timeToX(view, plot, box.starts);
    const right = timeToX(view, plot, box.ends);
    const top = fluxToY(view, plot, box.high);
    const bottom = fluxToY(view, plot, box.low);
    if (x < left - reach || x > right + reach || y < top - reach || y > bottom + reach) return null;
    /** @type {(at: number, near: number, far: number) => -1 | 0 | 1} */
    const side = (at, near, far) => {
        const inner = Math.min(reach, (far - near) / 3);
        if (at < near + inner) return -1;
        return at > far - inner ? 1 : 0;
    };
    const across = side(x, left, right);
    const down = side(y, top, bottom);
    return {
        time: across === 0 ? null : across < 0 ? 'starts' : 'ends',
        flux: down === 0 ? null : down < 0 ? 'high' : 'low',
    };
}

/**
 * The box after its part was dragged by (days, flux), kept within the bounds and at least `least`
 * long. An edge dragged past its opposite stops there.
 * @param {Box} box @param {Part} part @param {number} byDays @param {number} byFlux
 * @param {Span} bounds @param {number} least
 * @returns {Box}
 */
export function boxDrag(box, part, byDays, byFlux, bounds, least) {
    let { starts, ends, low, high } = box;
    if (part.time === null && part.flux === null) {
        const days = clamp(byDays, bounds.t0 - starts, bounds.t1 - ends);
        return { starts: starts + days, ends: ends + days, low: low + byFlux, high: high + byFlux };
    }
    if (part.time === 'starts') starts = clamp(starts + byDays, bounds.t0, ends - least);
    if (part.time === 'ends') ends = clamp(ends + byDays, starts + least, bounds.t1);
    if (part.flux === 'low') low = Math.min(low + byFlux, high);
    if (part.flux === 'high') high = Math.max(high + byFlux, low);
    return { starts, ends, low, high };
}

/**
 * The box between two corners, within the bounds and at least `least` long.
 * @param {{time: number, flux: number}} from @param {{time: number, flux: number}} to
 * @param {Span} bounds @param {number} least
 * @returns {Box}
 */
export function boxBetween(from, to, bounds, least) {
    const length = Math.min(least, bounds.t1 - bounds.t0);
    const starts = clamp(Math.min(from.time, to.time), bounds.t0, bounds.t1 - length);
    const ends = clamp(Math.max(from.time, to.time), starts + length, bounds.t1);
    return {
        starts,
        ends,
        low: Math.min(from.flux, to.flux),
        high: Math.max(from.flux, to.flux),
    };
}

/** @param {number[]} values not empty; is sorted in place */
function median(values) {
    values.sort((a, b) => a - b);
    const middle = values.length >> 1;
    return values.length % 2 ? values[middle] : (values[middle - 1] + values[middle]) / 2;
}

/**
 * Low and high for a box that was given by its times only: from the level beside it (the median of
 * one length to each side) down to the lowest points within it.
 * @param {ArrayLike<number>} times @param {ArrayLike<number>} flux
 * @param {number} starts @param {number} ends
 * @returns {{low: number, high: number}}
 */
export function heightsFor(times, flux, starts, ends) {
    const length = ends - starts;
    const beside = [];
    const within = [];
    for (let at = firstAt(times, starts - length); at < times.length; at++) {
        if (times[at] > ends + length) break;
        if (times[at] < starts || times[at] > ends) beside.push(flux[at]);
        else within.push(flux[at]);
    }
    if (within.length === 0) {
        const level = beside.length > 0 ? median(beside) : 1;
        return { low: level, high: level };
    }
    const low = within.reduce((a, b) => Math.min(a, b));
    const high = beside.length > 0 ? median(beside) : median(within);
    return { low, high: Math.max(low, high) };
}

/**
 * How many times larger the flux is in one view than in the other about a place: the median ratio
 * over the points of the interval, or of the nearest point when it holds none; 1 when unknown.
 * @param {ArrayLike<number>} times @param {ArrayLike<number>} above @param {ArrayLike<number>}
 * below
 * @param {number} starts @param {number} ends
 */
export function levelRatio(times, above, below, starts, ends) {
    if (above.length !== times.length || below.length !== times.length) return 1;
    const ratios = [];
    for (let at = firstAt(times, starts); at < times.length && times[at] <= ends; at++)
        if (below[at] > 0) ratios.push(above[at] / below[at]);
    if (ratios.length > 0) return median(ratios);
    const near = nearestAt(times, (starts + ends) / 2);
    return near >= 0 && below[near] > 0 ? above[near] / below[near] : 1;
}
