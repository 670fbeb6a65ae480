/**
 * A server from memory for the browser tests: the files of web/, and as much of /api/v1 as the
 * pages
 * use, over an invented light curve from a seed. Tests may make it fail at will, which the real
 * server
 * cannot be made to: `mock.fault` is asked before each request.
 */
import { createServer } from 'node:http';
import { readFile } from 'node:fs/promises';
import { randomUUID } from 'node:crypto';
import { extname, join, normalize } from 'node:path';
import { fileURLToPath } from 'node:url';

const WEB = fileURLToPath(new URL('../../web/', import.meta.url));
const KINDS = {
    '.html': 'text/html; charset=utf-8',
    '.js': 'text/javascript; charset=utf-8',
    '.css': 'text/css; charset=utf-8',
    '.svg': 'image/svg+xml',
    '.json': 'application/json',
};
const STANDING = {
    'Content-Security-Policy':
        "default-src 'self'; object-src 'none'; base-uri 'none'; form-action 'self'; frame-ancestors 'none'",
    'X-Content-Type-Options': 'nosniff',
};
const REFERENCE = 'BJD_TDB - 2460000';
const CAUTION =
    'A candidate is not a confirmed planet: false positives such as eclipsing binaries and instrument artefacts remain, and confirmation needs independent follow-up.';

/** Random numbers from a seed (a linear congruential generator). @param {number} seed */
export function randomFrom(seed) {
    let state = seed >>> 0;
    return () => {
        state = (Math.imul(state, 1664525) + 1013904223) >>> 0;
        return state / 4294967296;
    };
}

/**
 * An invented star: slow changes, noise, a gap, some dips.
 * @param {number} seed @param {number} starts @param {number} days @param {number} cadence days
 */
export function invent(seed, starts, days, cadence) {
    const random = randomFrom(seed);
    const normal = () =>
        Math.sqrt(-2 * Math.log(random() + 1e-12)) * Math.cos(2 * Math.PI * random());
    const waves = [0, 1, 2].map(() => ({
        size: 0.002 * random(),
        turn: 0.6 + 3 * random(),
        phase: 6.28 * random(),
    }));
    const dips = Array.from({ length: 1 + Math.floor(2 * random()) }, () => ({
        middle: starts + days * (0.08 + 0.84 * random()),
        half: 0.06 + 0.1 * random(),
        depth: 0.004 + 0.006 * random(),
    }));
    const noise = 0.0008;
    const gap = starts + days * (0.35 + 0.3 * random());
    /** @type {number[][]} */
    const [times, flux, trend] = [[], [], []];
    for (let time = starts; time < starts + days; time += cadence) {
        const level =
            1 +
            waves.reduce(
                (sum, { size, turn, phase }) => sum + size * Math.sin(time * turn + phase),
                0
            );
        const off = dips.reduce((sum, { middle, half, depth }) => {
            const far = Math.abs(time - middle);
            return sum + depth * Math.min(1, Math.max(0, (half - far) / (0.25 * half)));
        }, 0);
        const noisy = normal() * noise;
        if (Math.abs(time - gap) < 0.4) continue;
        times.push(time);
        flux.push(level * (1 - off) + noisy);
        trend.push(level);
    }
    return { starts, ends: times[times.length - 1], times, flux, trend, noise, dips };
}

/** @param {ReturnType<typeof invent>} curve @param {boolean} flat */
export function pack(curve, flat) {
    const count = curve.times.length;
    const reference = Math.floor(curve.starts);
    const body = Buffer.alloc(32 + 8 * count);
    body.write('EBF1', 0, 'latin1');
    body.writeUInt32LE(count, 4);
    body.writeDoubleLE(reference, 8);
    body.writeDoubleLE(15000, 16);
    body.writeFloatLE(curve.noise, 24);
    for (let at = 0; at < count; at++) {
        const value = flat ? curve.flux[at] / curve.trend[at] : curve.flux[at];
        body.writeFloatLE(curve.times[at] - reference, 32 + 4 * at);
        body.writeFloatLE(value - 1, 32 + 4 * (count + at));
    }
    return body;
}

class Refusal extends Error {
    /**
     * @param {number} status
     * @param {string} kind
     * @param {string} detail
     * @param {Record<string, string>} [headers]
     */
    constructor(status, kind, detail, headers = {}) {
        super(detail);
        this.status = status;
        this.kind = kind;
        this.headers = headers;
    }
}

/**
 * @typedef {object} Fault
 * @property {number} [status] answer with this instead @property {string} [kind]
 * @property {string} [detail] @property {Record<string, string>} [headers]
 * @property {boolean} [cut] break the connection off
 * @property {boolean} [lose] do the work, then break off before the answer
 */

/**
 * @param {{segments?: number, points?: number, days?: number, seed?: number, candidates?: number}}
 * [options]
 */
export async function startMock({
    segments = 12,
    points = 10_800,
    days = 15,
    seed = 7,
    candidates = 137,
} = {}) {
    /** @type {Map<number, any>} */ const people = new Map();
    /** @type {Map<string, number>} */ const sessions = new Map();
    /** @type {Map<string, any>} */ const leases = new Map();
    /** @type {Map<string, {body: string, answer: any}>} */ const answered = new Map();
    /** @type {any[]} */ const reviews = [];
    /** @type {string[]} */ const requests = [];
    const sheets = Array.from({ length: segments }, (_, at) => ({
        id: (0xeb0000000000 + seed * 4096 + at).toString(16).padStart(16, '0'),
        curve: invent(seed * 1000 + at, 1325.3 + days * at, days, days / points),
    }));
    const random = randomFrom(seed);
    const ranked = Array.from({ length: candidates }, (_, at) => candidateRow(at + 1, random));
    const run = { run: 3, finished: '2026-11-30T21:04:00Z', reviews: 1204 };
    let working = /** @type {number | null} */ (null);

    const mock = {
        /** @type {(method: string, path: string) => Fault | null | undefined} */
        fault: () => null,
        /** @type {(review: any) => any} what a review's answer says of a control */
        control: () => undefined,
        reviews,
        requests,
        leases,
        sheets,
        people,
        /** Everybody is signed out, as after their sessions ended. */
        endSessions: () => sessions.clear(),
        address: '',
        stop: () =>
            new Promise((resolve) => {
                server.close(resolve);
                server.closeAllConnections?.();
            }),
    };

    /** @param {any} row */
    const shown = ({ person, handle, role, guest, credit, joined }) => ({
        person,
        handle,
        role,
        guest,
        credit,
        joined,
    });

    /** @param {string} handle @param {string | null} passphrase @param {string} role */
    function addPerson(handle, passphrase, role) {
        const person = people.size + 1;
        const row = {
            person,
            handle,
            passphrase,
            role,
            guest: passphrase === null,
            credit: false,
            joined: new Date().toISOString(),
        };
        people.set(person, row);
        return row;
    }
    addPerson('keeper', 'tide table 1871', 'science');

    /** @param {import('node:http').IncomingMessage} request */
    function personOf(request) {
        const secret = /ebbmark_session=([^;]+)/.exec(request.headers.cookie ?? '')?.[1] ?? '';
        return people.get(sessions.get(secret) ?? -1) ?? null;
    }
    /** @param {import('node:http').IncomingMessage} request */
    function mustBe(request) {
        const person = personOf(request);
        if (person === null) throw new Refusal(401, 'not_signed_in', 'Nobody is signed in.');
        return person;
    }
    /** @param {import('node:http').IncomingMessage} request */
    function mustRank(request) {
        const person = mustBe(request);
        if (person.role === 'reviewer')
            throw new Refusal(403, 'not_allowed', 'This needs the science role.');
        return person;
    }
    /** @param {any} row */
    function opened(row) {
        const secret = randomUUID();
        sessions.set(secret, row.person);
        return {
            status: 201,
            json: shown(row),
            headers: {
                'Set-Cookie': `ebbmark_session=${secret}; HttpOnly; SameSite=Strict; Path=/`,
            },
        };
    }

    /**
     * @type {[RegExp, (context: {request: import('node:http').IncomingMessage, url: URL, body: any,
     * text: string, match: RegExpExecArray}) => any][]}
     */
    const routes = [
        [
            /^POST \/people$/,
            ({ body }) => {
                const guest = body?.handle === undefined;
                const handle = guest ? `heron-${people.size + 11}` : String(body.handle);
                if ([...people.values()].some((row) => row.handle === handle))
                    throw new Refusal(
                        409,
                        'conflict',
                        'This handle is taken. Please choose another.'
                    );
                return opened(
                    addPerson(handle, guest ? null : String(body.passphrase), 'reviewer')
                );
            },
        ],
        [
            /^POST \/sessions$/,
            ({ body }) => {
                const row = [...people.values()].find(
                    (one) =>
                        one.handle === body?.handle &&
                        one.passphrase === body?.passphrase &&
                        one.passphrase !== null
                );
                if (!row)
                    throw new Refusal(
                        401,
                        'wrong_passphrase',
                        'Handle and passphrase do not go together.'
                    );
                return opened(row);
            },
        ],
        [
            /^DELETE \/sessions\/current$/,
            ({ request }) => {
                const secret =
                    /ebbmark_session=([^;]+)/.exec(request.headers.cookie ?? '')?.[1] ?? '';
                sessions.delete(secret);
                return { status: 204 };
            },
        ],
        [/^GET \/me$/, ({ request }) => ({ json: shown(mustBe(request)) })],
        [
            /^PATCH \/me$/,
            ({ request, body }) => {
                const row = mustBe(request);
                if (typeof body.credit === 'boolean') row.credit = body.credit;
                if (typeof body.passphrase === 'string') {
                    row.passphrase = body.passphrase;
                    row.guest = false;
                }
                return { json: shown(row) };
            },
        ],
        [
            /^DELETE \/me$/,
            ({ request }) => {
                const row = mustBe(request);
                people.delete(row.person);
                for (const [secret, person] of sessions)
                    if (person === row.person) sessions.delete(secret);
                return { status: 204 };
            },
        ],
        [
            /^POST \/leases$/,
            ({ request }) => {
                const person = mustBe(request).person;
                const held = [...leases.values()].filter((lease) => lease.person === person);
                const sheet = sheets.find((one) => !held.some((lease) => lease.sheet === one));
                if (!sheet) return { status: 204 };
                const lease = randomUUID();
                leases.set(lease, { person, sheet, used: null });
                return {
                    status: 201,
                    json: {
                        lease,
                        expires: new Date(Date.now() + 15 * 60_000).toISOString(),
                        segment: {
                            id: sheet.id,
                            starts: sheet.curve.starts,
                            ends: sheet.curve.ends,
                            points: sheet.curve.times.length,
                            time_reference: REFERENCE,
                            flux: `/api/v1/segments/${sheet.id}/flux`,
                        },
                    },
                };
            },
        ],
        [
            /^GET \/segments\/([0-9a-f]{16})\/flux$/,
            ({ request, url, match }) => {
                const person = mustBe(request).person;
                const sheet = sheets.find((one) => one.id === match[1]);
                if (!sheet) throw new Refusal(404, 'not_found', 'There is no such segment.');
                if (
                    ![...leases.values()].some(
                        (lease) => lease.person === person && lease.sheet === sheet
                    )
                )
                    throw new Refusal(403, 'not_allowed', 'This segment was not handed to you.');
                return {
                    bytes: pack(sheet.curve, url.searchParams.get('view') === 'trend_removed'),
                    headers: {
                        'Content-Type': 'application/vnd.ebbmark.flux',
                        'Cache-Control': 'private, max-age=86400, immutable',
                    },
                };
            },
        ],
        [
            /^POST \/reviews$/,
            ({ request, body, text }) => {
                const person = mustBe(request).person;
                const key = String(request.headers['idempotency-key'] ?? '');
                if (!/^[!-~]{1,200}$/.test(key))
                    throw new Refusal(400, 'bad_request', 'The Idempotency-Key is missing.');
                const before = answered.get(key);
                if (before && before.body !== text)
                    throw new Refusal(422, 'invalid', 'This key was used with another body.');
                if (before)
                    return {
                        status: 201,
                        json: before.answer,
                        headers: { 'Ebbmark-Repeated': '1' },
                    };
                const lease = leases.get(body.lease);
                if (!lease) throw new Refusal(422, 'invalid', 'lease is not one of ours.');
                if (lease.person !== person)
                    throw new Refusal(
                        403,
                        'not_your_lease',
                        'This segment was handed to somebody else.'
                    );
                if (lease.used !== null)
                    throw new Refusal(
                        409,
                        'lease_used',
                        'A review of this segment was taken already.'
                    );
                const { starts, ends } = lease.sheet.curve;
                for (const [at, mark] of body.marks.entries())
                    if (
                        !(mark.starts < mark.ends) ||
                        mark.starts < starts - 0.01 ||
                        mark.ends > ends + 0.01 ||
                        mark.low > mark.high
                    )
                        throw new Refusal(422, 'invalid', `marks[${at}] makes no sense.`);
                lease.used = key;
                const review = {
                    review: reviews.length + 1,
                    late: false,
                    person,
                    sheet: lease.sheet,
                    ...body,
                };
                reviews.push({ ...review, submitted: new Date().toISOString() });
                const control = mock.control(review);
                const answer = {
                    review: review.review,
                    late: false,
                    ...(control ? { control } : {}),
                };
                answered.set(key, { body: text, answer });
                return { status: 201, json: answer };
            },
        ],
        [
            /^GET \/me\/record$/,
            ({ request, url }) => {
                const person = mustBe(request).person;
                const mine = reviews.filter((review) => review.person === person).reverse();
                const from = Number(url.searchParams.get('cursor') ?? 0);
                const limit = Number(url.searchParams.get('limit') ?? 100);
                const marks = mine.reduce((sum, review) => sum + review.marks.length, 0);
                return {
                    json: {
                        totals: {
                            looks: mine.length,
                            marks,
                            days_looked: mine.reduce(
                                (sum, { sheet }) => sum + sheet.curve.ends - sheet.curve.starts,
                                0
                            ),
                            first: mine.at(-1)?.submitted ?? null,
                            last: mine[0]?.submitted ?? null,
                        },
                        skill:
                            mine.length < 3
                                ? null
                                : {
                                      hit: { value: 0.71, low: 0.52, high: 0.85 },
                                      chance: { value: 0.4, low: 0.1, high: 1.3 },
                                  },
                        candidates:
                            marks === 0
                                ? []
                                : [
                                      {
                                          candidate: 4,
                                          star: 'RB-0012',
                                          mid_time: 1330.4123,
                                          probability: 0.9312,
                                      },
                                  ],
                        reviews: mine.slice(from, from + limit).map((review) => ({
                            review: review.review,
                            submitted: review.submitted,
                            late: review.late,
                            segment: {
                                id: review.sheet.id,
                                starts: review.sheet.curve.starts,
                                ends: review.sheet.curve.ends,
                                time_reference: REFERENCE,
                            },
                            marks: review.marks,
                            conditions: review.conditions,
                        })),
                        next: from + limit < mine.length ? String(from + limit) : null,
                        caution: CAUTION,
                    },
                };
            },
        ],
        [
            /^GET \/candidates$/,
            ({ request, url }) => {
                mustRank(request);
                return candidateList(url);
            },
        ],
        [
            /^GET \/candidates\/(\d+)$/,
            ({ request, match }) => {
                mustRank(request);
                const row = ranked.find((one) => one.candidate === Number(match[1]));
                if (!row) throw new Refusal(404, 'not_found', 'There is no such candidate.');
                const marks = [0.9, 0.7, 0.4].map((weight, at) => ({
                    person: at + 2,
                    handle: ['tern', null, 'curlew'][at],
                    starts: row.starts + 0.01 * at,
                    ends: row.ends - 0.008 * at,
                    low: 0.99,
                    high: 1,
                    certainty: at === 1 ? 'unsure' : 'sure',
                    weight,
                }));
                return {
                    json: {
                        ...row,
                        marked_by: marks,
                        terms: { looks: 2.1, time: 1.4, snr: 0.8, prior: -1.2 },
                        verdicts: row.verdicts ?? [],
                        caution: CAUTION,
                    },
                };
            },
        ],
        [
            /^POST \/candidates\/(\d+)\/verdicts$/,
            ({ request, body, match }) => {
                const person = mustRank(request);
                const row = ranked.find((one) => one.candidate === Number(match[1]));
                if (!row) throw new Refusal(404, 'not_found', 'There is no such candidate.');
                row.verdict = body.verdict;
                row.verdicts = [
                    {
                        verdict: body.verdict,
                        note: body.note ?? '',
                        handle: person.handle,
                        given: new Date().toISOString(),
                    },
                    ...(row.verdicts ?? []),
                ];
                return { status: 201, json: { verdict: body.verdict } };
            },
        ],
        [
            /^GET \/batches$/,
            ({ request }) => {
                const person = mustRank(request);
                if (person.role !== 'admin')
                    throw new Refusal(403, 'not_allowed', 'This needs the admin role.');
                return { json: { batches: [], next: null } };
            },
        ],
        [
            /^GET \/stars\/([^/]+)\/light-curve$/,
            ({ request, url, match }) => {
                mustRank(request);
                const row = ranked.find((one) => one.star === decodeURIComponent(match[1]));
                const [from, to] = [
                    Number(url.searchParams.get('from')),
                    Number(url.searchParams.get('to')),
                ];
                const noise = randomFrom((row?.candidate ?? 1) * 77);
                const times = Array.from(
                    { length: 220 },
                    (_, at) => from + ((to - from) * at) / 219
                );
                const inside = (/** @type {number} */ time) =>
                    row && time > row.starts && time < row.ends ? row.depth_ppm * 1e-6 : 0;
                return {
                    json: {
                        star: row?.star ?? '',
                        time_reference: REFERENCE,
                        times,
                        flux: times.map((time) => 1 - inside(time) + (noise() - 0.5) * 0.003),
                        trend: times.map(() => 1),
                    },
                };
            },
        ],
        [
            /^POST \/consensus-runs$/,
            ({ request }) => {
                mustRank(request);
                if (working !== null)
                    throw new Refusal(409, 'conflict', 'A consensus run is at work already.');
                working = Date.now();
                return {
                    status: 202,
                    json: { state: 'working', fraction: 0 },
                    headers: { Location: '/api/v1/consensus-runs/current' },
                };
            },
        ],
        [
            /^GET \/consensus-runs\/current$/,
            ({ request }) => {
                mustRank(request);
                const done = working === null ? 1 : Math.min(1, (Date.now() - working) / 1500);
                if (working !== null && done >= 1) {
                    working = null;
                    run.run++;
                    run.finished = new Date().toISOString();
                }
                return {
                    json: {
                        state: working === null ? 'idle' : 'working',
                        fraction: done,
                        newest: run,
                    },
                };
            },
        ],
    ];

    /** @param {URL} url */
    function candidateList(url) {
        const wanted = (/** @type {string} */ name) => url.searchParams.get(name) ?? '';
        const sort = wanted('sort') || '-probability';
        const column =
            /** @type {Record<string, string>} */ ({
                depth: 'depth_ppm',
                duration: 'duration_h',
                time: 'mid_time',
            })[sort.replace('-', '')] ?? sort.replace('-', '');
        const down = sort.startsWith('-') ? -1 : 1;
        const rows = ranked
            .filter((row) => row.probability >= Number(wanted('min_probability') || 0))
            .filter((row) => wanted('star') === '' || row.star === wanted('star'))
            .filter(
                (row) => wanted('verdict') === '' || (row.verdict ?? 'none') === wanted('verdict')
            )
            .sort((a, b) => down * (a[column] < b[column] ? -1 : a[column] > b[column] ? 1 : 0));
        if (wanted('format') === 'csv')
            return {
                bytes: Buffer.from(
                    `candidate,star\n${rows.map((row) => `${row.candidate},${row.star}`).join('\n')}\n`
                ),
                headers: { 'Content-Type': 'text/csv' },
            };
        const from = Number(wanted('cursor') || 0);
        const limit = Number(wanted('limit') || 100);
        return {
            json: {
                run,
                total: rows.length,
                candidates: rows.slice(from, from + limit),
                next: from + limit < rows.length ? String(from + limit) : null,
                caution: CAUTION,
            },
        };
    }

    /** @param {import('node:http').IncomingMessage} request */
    async function bodyOf(request) {
        const parts = [];
        for await (const part of request) parts.push(part);
        return Buffer.concat(parts).toString('utf8');
    }

    /** @param {import('node:http').IncomingMessage} request @param {URL} url */
    async function answerApi(request, url) {
        const text = await bodyOf(request);
        if (request.method !== 'GET' && request.headers['ebbmark-request'] !== '1')
            throw new Refusal(
                403,
                'missing_request_header',
                'The header Ebbmark-Request is missing.'
            );
        const line = `${request.method} ${url.pathname.slice('/api/v1'.length)}`;
        for (const [pattern, act] of routes) {
            const match = pattern.exec(line);
            if (match)
                return act({
                    request,
                    url,
                    text,
                    match,
                    body: text === '' ? undefined : JSON.parse(text),
                });
        }
        throw new Refusal(404, 'not_found', 'There is nothing here.');
    }

    /** @param {URL} url */
    async function answerFile(url) {
        const path = url.pathname === '/' ? '/index.html' : url.pathname;
        const safe = normalize(path).replace(/^(\.\.[/\\])+/, '');
        for (const name of [safe, `${safe}.html`]) {
            const bytes = await readFile(join(WEB, name)).catch(() => null);
            const kind = KINDS[/** @type {keyof typeof KINDS} */ (extname(name))];
            if (bytes !== null && kind)
                return { bytes, headers: { 'Content-Type': kind, 'Cache-Control': 'no-cache' } };
        }
        throw new Refusal(404, 'not_found', 'There is nothing here.');
    }

    const server = createServer(async (request, response) => {
        const url = new URL(request.url ?? '/', 'http://mock');
        const isApi = url.pathname.startsWith('/api/v1');
        const fault = isApi
            ? mock.fault(request.method ?? '', url.pathname.slice('/api/v1'.length))
            : null;
        if (isApi) requests.push(`${request.method} ${url.pathname.slice('/api/v1'.length)}`);
        try {
            if (fault?.cut) return void request.destroy();
            if (fault?.status)
                throw new Refusal(
                    fault.status,
                    fault.kind ?? 'internal',
                    fault.detail ?? 'It failed on purpose.',
                    fault.headers
                );
            const answer = isApi ? await answerApi(request, url) : await answerFile(url);
            if (fault?.lose) return void request.socket.destroy();
            const bytes =
                answer.bytes ?? (answer.json === undefined ? '' : JSON.stringify(answer.json));
            const kind =
                answer.json === undefined
                    ? {}
                    : { 'Content-Type': 'application/json', 'Cache-Control': 'no-store' };
            response.writeHead(answer.status ?? 200, { ...STANDING, ...kind, ...answer.headers });
            response.end(bytes);
        } catch (error) {
            const refusal =
                error instanceof Refusal ? error : new Refusal(500, 'internal', String(error));
            response.writeHead(refusal.status, {
                ...STANDING,
                'Content-Type': 'application/problem+json',
                ...refusal.headers,
            });
            response.end(
                JSON.stringify({
                    type: `/problems/${refusal.kind}`,
                    title: refusal.message,
                    status: refusal.status,
                    detail: refusal.message,
                })
            );
        }
    });
    await new Promise((resolve) =>
        server.listen(Number(process.env.PORT ?? 0), '127.0.0.1', () => resolve(undefined))
    );
    const bound = /** @type {import('node:net').AddressInfo} */ (server.address());
    mock.address = `http://127.0.0.1:${bound.port}`;
    return mock;
}

/** @param {number} candidate @param {() => number} random @returns {any} */
function candidateRow(candidate, random) {
    const middle = 1326 + 170 * random();
    const duration = 1.5 + 6 * random();
    const snr = 3 + 30 * random() ** 2;
    const probability = Math.min(
        0.99995,
        Math.max(0.0002, 1 / (1 + Math.exp(-(snr - 8) / 2 - 3 * (random() - 0.5))))
    );
    const depth = 300 + 9000 * random() ** 2;
    return {
        candidate,
        run: 3,
        star: `RB-${String(1 + Math.floor(300 * random())).padStart(4, '0')}`,
        ra: null,
        dec: null,
        starts: middle - duration / 48,
        ends: middle + duration / 48,
        mid_time: middle,
        time_reference: REFERENCE,
        probability,
        log_odds: Math.log(probability / (1 - probability)),
        marks_only_probability: probability * 0.97,
        looks: 6 + Math.floor(9 * random()),
        marks: 1 + Math.floor(6 * random()),
        snr,
        depth_ppm: depth,
        depth_error_ppm: depth / snr,
        duration_h: duration,
        duration_error_h: duration / snr,
        period_d: random() > 0.8 ? 1 + 20 * random() : null,
        period_error_d: null,
        epoch: null,
        transits: null,
        other_stars: null,
        flags: random() > 0.7 ? 'near_gap' : '',
        verdict: null,
    };
}

if (process.argv[1] === fileURLToPath(import.meta.url)) {
    const mock = await startMock();
    console.log(`The mock serves at ${mock.address}/ (keeper, "tide table 1871")`);
}
