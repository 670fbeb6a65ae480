/**
 * Reviews that wait to be sent. A review is kept (over reloads, where the browser lets us) until
 * the
 * server has said that it has it, or that it never will. Pure of browser things: storage, sending,
 * clock and timers are handed in.
 */
import { Problem, Unreached } from './api.js';

/**
 * @typedef {object} Waiting
 * @property {string} key      Idempotency-Key: the same at every try
 * @property {number} person   whose it is; sent only while they are signed in
 * @property {string} handle   to say whose it is
 * @property {number} since    ms
 * @property {object} body     of POST /reviews
 * @property {{starts: number, ends: number, time_reference: string}} segment to speak of it
 */
/**
 * @typedef {object} Storage
 * @property {() => Promise<Waiting[]>} all
 * @property {(item: Waiting) => Promise<void>} put
 * @property {(key: string) => Promise<void>} remove
 */
/**
 * @typedef {object} State
 * @property {readonly Waiting[]} waiting
 * @property {boolean} sending
 * @property {boolean} signInNeeded  the server no longer knows who we are
 * @property {number | null} nextTry ms, when the next try comes by itself
 * @property {string} trouble        why the last try failed; '' when it did not
 * @property {boolean} kept          false: what waits would be lost with this page
 */
/**
 * @typedef {object} Parts
 * @property {Storage} storage
 * @property {(body: object, key: string) => Promise<any>} send
 * @property {() => number} now
 * @property {(run: () => void, ms: number) => unknown} setTimer
 * @property {(timer: any) => void} clearTimer
 * @property {() => number} random 0…1
 * @property {(state: State) => void} onChange
 * @property {(item: Waiting, answer: any) => void} onSent
 * @property {(item: Waiting, problem: Problem) => void} onRefused
 */

const FIRST_WAIT_MS = 1000;
const LONGEST_WAIT_MS = 60_000;

/**
 * Milliseconds until try `tries` + 1: twice as long each time, up to a minute, spread so that many
 * browsers do not come back at once; never sooner than the server asked for.
 * @param {number} tries failed so far, at least 1 @param {number} random 0…1
 * @param {number | null} retryAfterMs
 */
export function waitAfter(tries, random, retryAfterMs) {
    const most = Math.min(FIRST_WAIT_MS * 2 ** (tries - 1), LONGEST_WAIT_MS);
    return Math.max(most * (0.5 + 0.5 * random), retryAfterMs ?? 0);
}

/** @param {unknown} error @returns {'sign in' | 'again' | 'refused'} what a failure means */
export function meaning(error) {
    if (error instanceof Unreached) return 'again';
    if (!(error instanceof Problem)) return 'again';
    if (error.status === 401) return 'sign in';
    if (error.status === 429 || error.status === 408 || error.status >= 500) return 'again';
    return 'refused';
}

/** @param {Parts} parts */
export function makeQueue(parts) {
    /** @type {Waiting[]} */
    let waiting = [];
    /** @type {State} */
    let state = {
        waiting,
        sending: false,
        signInNeeded: false,
        nextTry: null,
        trouble: '',
        kept: true,
    };
    /** @type {number | null} */
    let person = null;
    /** @type {unknown} */
    let timer = null;
    let tries = 0;

    /** @param {Partial<State>} patch */
    function change(patch) {
        state = { ...state, ...patch, waiting };
        parts.onChange(state);
    }

    function stopTimer() {
        if (timer !== null) parts.clearTimer(timer);
        timer = null;
    }

    /** @param {string} key */
    async function forget(key) {
        waiting = waiting.filter((item) => item.key !== key);
        try {
            await parts.storage.remove(key);
        } catch {
            change({ kept: false });
        }
    }

    /** @param {unknown} error @param {Waiting} item */
    async function failed(error, item) {
        const means = meaning(error);
        const sentence = error instanceof Error ? error.message : String(error);
        if (means === 'refused') {
            await forget(item.key);
            change({ trouble: '' });
            parts.onRefused(item, /** @type {Problem} */ (error));
            return true;
        }
        if (means === 'sign in') {
            change({ signInNeeded: true, trouble: sentence, nextTry: null });
            return false;
        }
        tries++;
        const asked = error instanceof Problem ? error.retryAfterMs : null;
        const wait = waitAfter(tries, parts.random(), asked);
        stopTimer();
        timer = parts.setTimer(() => {
            timer = null;
            void run();
        }, wait);
        change({ trouble: sentence, nextTry: parts.now() + wait });
        return false;
    }

    /** Sends one after the other until none is left, or a try fails. */
    async function run() {
        if (state.sending || person === null) return;
        stopTimer();
        change({ sending: true, nextTry: null });
        let going = true;
        while (going) {
            const item = waiting.find((one) => one.person === person);
            if (!item) break;
            try {
                const answer = await parts.send(item.body, item.key);
                tries = 0;
                await forget(item.key);
                change({ trouble: '', signInNeeded: false });
                parts.onSent(item, answer);
            } catch (error) {
                going = await failed(error, item);
            }
        }
        change({ sending: false });
    }

    return {
        state: () => state,

        /** Bring back what an earlier page left; nothing is sent before somebody is named. */
        async open() {
            try {
                const kept = await parts.storage.all();
                const here = new Set(waiting.map((item) => item.key));
                waiting = [...kept.filter((item) => !here.has(item.key)), ...waiting];
                waiting.sort((a, b) => a.since - b.since);
                change({});
            } catch {
                change({ kept: false });
            }
        },

        /** @param {Waiting} item */
        async add(item) {
            waiting = [...waiting, item];
            change({});
            try {
                await parts.storage.put(item);
            } catch {
                change({ kept: false });
            }
            void run();
        },

        /** Who is signed in; null stops sending. @param {number | null} id */
        setPerson(id) {
            person = id;
            tries = 0;
            if (id === null) stopTimer();
            change({ signInNeeded: false, nextTry: null });
            void run();
        },

        /** Try at once, whatever wait was set. */
        tryNow() {
            tries = 0;
            void run();
        },

        /** Give one up. @param {string} key */
        async discard(key) {
            await forget(key);
            change({});
        },

        /** Give up all of one person's. @param {number} id */
        async discardOf(id) {
            for (const item of waiting.filter((one) => one.person === id)) await forget(item.key);
            change({});
        },
    };
}

/** @typedef {ReturnType<typeof makeQueue>} Queue */
