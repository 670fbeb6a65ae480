/**
 * Speaks with the server. Every failure is one of two: a Problem (the server said no, with a
 * sentence) or Unreached (nobody answered).
 */
import { readFlux } from './flux.js';

/** @typedef {import('./flux.js').Flux} Flux */
/** @typedef {'as_measured' | 'trend_removed'} FluxView */
/**
 * @typedef {object} Person
 * @property {number} person @property {string} handle
 * @property {'reviewer' | 'science' | 'admin'} role
 * @property {boolean} guest @property {boolean} credit @property {string} joined
 */
/**
 * @typedef {object} Segment
 * @property {string} id @property {number} starts @property {number} ends
 * @property {number} points @property {string} time_reference @property {string} flux
 */
/** @typedef {{lease: string, expires: string, segment: Segment}} Lease */
/** @typedef {{value: number, low: number, high: number}} Interval */

const BASE = '/api/v1';
const PATIENCE_MS = 30_000;

export class Problem extends Error {
    name = 'Problem';
    /**
     * @param {number} status @param {string} kind @param {string} sentence
     * @param {{field: string, sentence: string}[]} fields @param {number | null} retryAfterMs
     */
    constructor(status, kind, sentence, fields, retryAfterMs) {
        super(sentence);
        this.status = status;
        this.kind = kind;
        this.fields = fields;
        this.retryAfterMs = retryAfterMs;
    }
}

export class Unreached extends Error {
    name = 'Unreached';
}

/**
 * Retry-After as seconds or as a date, in milliseconds from now; null when there is none to use.
 * @param {string | null} value @param {number} now
 */
export function retryAfter(value, now) {
    if (value === null || value.trim() === '') return null;
    const seconds = Number(value);
    const wait = Number.isFinite(seconds) ? seconds * 1000 : Date.parse(value) - now;
    return Number.isFinite(wait) ? Math.min(Math.max(wait, 0), 3_600_000) : null;
}

/**
 * The fields at fault, in whatever form the problem gives them: {name: sentence} or a list of
 * {field | name | pointer, sentence | detail | message}.
 * @param {unknown} fields
 * @returns {{field: string, sentence: string}[]}
 */
function fieldsOf(fields) {
    if (typeof fields !== 'object' || fields === null) return [];
    if (!Array.isArray(fields))
        return Object.entries(fields).map(([field, sentence]) => ({
            field,
            sentence: String(sentence),
        }));
    return fields.map((entry) => ({
        field: String(entry?.field ?? entry?.name ?? entry?.pointer ?? ''),
        sentence: String(entry?.sentence ?? entry?.detail ?? entry?.message ?? ''),
    }));
}

/** @param {Response} response @returns {Promise<Problem>} */
async function problemOf(response) {
    const wait = retryAfter(response.headers.get('Retry-After'), Date.now());
    const said = await response.json().catch(() => null);
    const sentence =
        [said?.detail, said?.title].find((text) => typeof text === 'string' && text !== '') ??
        `The server answered with status ${response.status}.`;
    const kind =
        String(said?.type ?? '')
            .split('/')
            .at(-1) ?? '';
    return new Problem(response.status, kind, sentence, fieldsOf(said?.fields), wait);
}

/**
 * @param {string} method @param {string} path under /api/v1, or absolute
 * @param {{body?: unknown, headers?: Record<string, string>}} [options]
 * @returns {Promise<Response>} an answer with a 2xx status
 */
async function ask(method, path, { body, headers = {} } = {}) {
    /** @type {Record<string, string>} */
    const all = { Accept: 'application/json', ...headers };
    if (method !== 'GET') all['Ebbmark-Request'] = '1';
    if (body !== undefined) all['Content-Type'] = 'application/json';
    const patience = new AbortController();
    const timer = setTimeout(() => patience.abort(), PATIENCE_MS);
    let response;
    try {
        response = await fetch(path.startsWith('/api/') ? path : BASE + path, {
            method,
            headers: all,
            credentials: 'same-origin',
            signal: patience.signal,
            body: body === undefined ? undefined : JSON.stringify(body),
        });
    } catch {
        throw new Unreached('The server cannot be reached. Is this device connected?');
    } finally {
        clearTimeout(timer);
    }
    if (!response.ok) throw await problemOf(response);
    return response;
}

/**
 * The body of an answer; a body that breaks off or makes no sense is as good as no answer.
 * @template T
 * @param {Promise<T>} reading
 * @returns {Promise<T>}
 */
function whole(reading) {
    return reading.catch(() => {
        throw new Unreached('The answer of the server broke off.');
    });
}

/**
 * @param {string} method @param {string} path
 * @param {{body?: unknown, headers?: Record<string, string>}} [options]
 * @returns {Promise<any>}
 */
async function askJson(method, path, options) {
    const response = await ask(method, path, options);
    return response.status === 204 ? null : whole(response.json());
}

/** @param {Record<string, string | number | undefined | null>} values */
export function query(values) {
    const given = Object.entries(values).filter(
        ([, value]) => value !== undefined && value !== null && value !== ''
    );
    const text = new URLSearchParams(given.map(([key, value]) => [key, String(value)])).toString();
    return text === '' ? '' : `?${text}`;
}

/** @returns {Promise<Person | null>} null when nobody is signed in */
export async function whoAmI() {
    try {
        return await askJson('GET', '/me');
    } catch (error) {
        if (error instanceof Problem && error.status === 401) return null;
        throw error;
    }
}

/** @param {string} handle @param {string} passphrase @returns {Promise<Person>} */
export const join = (handle, passphrase) =>
    askJson('POST', '/people', { body: { handle, passphrase } });
/** @returns {Promise<Person>} */
export const joinAsGuest = () => askJson('POST', '/people', { body: {} });
/** @param {string} handle @param {string} passphrase @returns {Promise<Person>} */
export const signIn = (handle, passphrase) =>
    askJson('POST', '/sessions', { body: { handle, passphrase } });
export const signOut = () => askJson('DELETE', '/sessions/current');
/** @param {{credit?: boolean, passphrase?: string}} patch @returns {Promise<Person>} */
export const changeMe = (patch) => askJson('PATCH', '/me', { body: patch });
export const leave = () => askJson('DELETE', '/me');

/** @returns {Promise<Lease | null>} null when nothing is left to look at */
export const takeLease = () => askJson('POST', '/leases', { body: {} });

/**
 * @param {Lease} lease @param {FluxView} view
 * @returns {Promise<Flux>}
 */
export async function segmentFlux(lease, view) {
    const response = await ask('GET', `${lease.segment.flux}?view=${view}`, {
        headers: { Accept: 'application/vnd.ebbmark.flux', 'Ebbmark-Lease': lease.lease },
    });
    return readFlux(await whole(response.arrayBuffer()));
}

/**
 * @param {object} body @param {string} key
 * @returns {Promise<{review: number, late: boolean, control?: Control}>}
 */
export const sendReview = (body, key) =>
    askJson('POST', '/reviews', { body, headers: { 'Idempotency-Key': key } });

/**
 * What had been put into a control.
 * @typedef {object} Control
 * @property {'injected' | 'inverted'} kind
 * @property {{starts: number, ends: number, found: boolean}[]} dips
 */

/** @param {{limit?: number, cursor?: string}} [page] */
export const myRecord = (page = {}) => askJson('GET', `/me/record${query(page)}`);

/** @param {Record<string, string | number | undefined>} filters */
export const candidates = (filters) => askJson('GET', `/candidates${query(filters)}`);
/** @param {string | number} id */
export const candidate = (id) => askJson('GET', `/candidates/${encodeURIComponent(id)}`);
/** @param {string | number} id @param {{verdict: string, note?: string}} verdict */
export const giveVerdict = (id, verdict) =>
    askJson('POST', `/candidates/${encodeURIComponent(id)}/verdicts`, { body: verdict });
/** @param {string} star @param {number} from @param {number} to */
export const lightCurve = (star, from, to) =>
    askJson('GET', `/stars/${encodeURIComponent(star)}/light-curve${query({ from, to })}`);
export const startRun = () => askJson('POST', '/consensus-runs');
export const runState = () => askJson('GET', '/consensus-runs/current');
