/** Counts the seconds that somebody could look, without those that the page was out of sight. */

/** @param {() => number} now ms */
export function makeStopwatch(now) {
    let counted = 0;
    /** @type {number | null} */
    let since = null;
    return {
        /** @param {number} [seconds] already counted */
        restart(seconds = 0) {
            counted = seconds * 1000;
            since = now();
        },
        /** @param {boolean} seen */
        setSeen(seen) {
            if (seen && since === null) since = now();
            else if (!seen && since !== null) {
                counted += now() - since;
                since = null;
            }
        },
        /** Whole tenths of seconds. */
        seconds() {
            const all = counted + (since === null ? 0 : now() - since);
            return Math.max(0, Math.round(all / 100) / 10);
        },
    };
}
