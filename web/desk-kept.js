/**
 * The unfinished segment, kept for this tab: a reload shows the same one with the same marks,
 * instead
 * of taking another from the heap.
 */

/** @typedef {import('./api.js').Lease} Lease */
/**
 * @typedef {{person: number, lease: Lease, said: import('./marks.js').Said, seconds: number}} Kept
 */

const NAME = 'ebbmark.unfinished';

/** @param {Kept} kept */
export function keep(kept) {
    try {
        sessionStorage.setItem(NAME, JSON.stringify(kept));
    } catch {
        return;
    }
}

export function forget() {
    try {
        sessionStorage.removeItem(NAME);
    } catch {
        return;
    }
}

/**
 * What was kept for this person, if its lease still runs.
 * @param {number} person @param {number} now ms
 * @returns {Kept | null}
 */
export function kept(person, now) {
    try {
        const found = JSON.parse(sessionStorage.getItem(NAME) ?? 'null');
        const segment = found?.lease?.segment;
        const fits =
            found?.person === person &&
            typeof found.lease.lease === 'string' &&
            typeof segment?.flux === 'string' &&
            Number.isFinite(segment.starts) &&
            Number.isFinite(segment.ends) &&
            Date.parse(found.lease.expires) > now;
        return fits ? found : null;
    } catch {
        return null;
    }
}
