/**
 * The next segment, fetched while the reviewer is still at the one before: its lease and both views
 * of its flux. Sending, fetching and the clock are handed in.
 */

/** @typedef {import('./api.js').Lease} Lease */
/** @typedef {import('./api.js').FluxView} FluxView */
/** @typedef {import('./flux.js').Flux} Flux */
/** @typedef {{lease: Lease, flux: Record<FluxView, Flux>}} Sheet a segment ready to be shown */

const LEFT_LEAST_MS = 3 * 60_000;

/**
 * @param {object} parts
 * @param {() => Promise<Lease | null>} parts.takeLease
 * @param {(lease: Lease, view: FluxView) => Promise<Flux>} parts.segmentFlux
 * @param {() => number} parts.now
 */
export function makeSupply({ takeLease, segmentFlux, now }) {
    /** @type {Promise<Sheet | null> | null} */
    let ahead = null;

    /** @param {Lease} lease @returns {Promise<Sheet>} */
    async function sheetOf(lease) {
        const [as_measured, trend_removed] = await Promise.all([
            segmentFlux(lease, 'as_measured'),
            segmentFlux(lease, 'trend_removed'),
        ]);
        return { lease, flux: { as_measured, trend_removed } };
    }

    /** @returns {Promise<Sheet | null>} */
    async function fetchOne() {
        const lease = await takeLease();
        return lease === null ? null : sheetOf(lease);
    }

    /** @param {Sheet} sheet is enough of its lease left to look at it in peace? */
    const fresh = (sheet) => Date.parse(sheet.lease.expires) - now() > LEFT_LEAST_MS;

    return {
        sheetOf,

        /** Begin to fetch one ahead, if none is. A failure shows at the next take. */
        prepare() {
            if (ahead !== null) return;
            ahead = fetchOne();
            ahead.catch(() => undefined);
        },

        /** The next sheet; null when nothing is left. One fetched ahead but grown old, or failed,
         * or empty, is fetched anew. @returns {Promise<Sheet | null>} */
        async take() {
            const waiting = ahead;
            ahead = null;
            if (waiting !== null) {
                const sheet = await waiting.catch(() => null);
                if (sheet !== null && fresh(sheet)) return sheet;
            }
            return fetchOne();
        },

        /** Somebody else signed in: what was fetched is not theirs. */
        drop() {
            ahead = null;
        },
    };
}
