/**
 * Signs in to the server of EBBMARK_URL and has the consensus run once, so that there is a list.
 */
import { SCIENCE } from './bench.mjs';

const base = `${process.env.EBBMARK_URL}/api/v1`;
const patience = Date.now() + 60_000;

/** @param {string} method @param {string} path @param {object} [body] @param {string} [cookie] */
async function ask(method, path, body, cookie = '') {
    const answer = await fetch(base + path, {
        method,
        headers: { 'Ebbmark-Request': '1', 'Content-Type': 'application/json', Cookie: cookie },
        body: body && JSON.stringify(body),
    });
    if (!answer.ok && answer.status !== 409)
        throw new Error(`${method} ${path}: ${answer.status} ${await answer.text()}`);
    return answer;
}

const entry = await ask('POST', '/sessions', SCIENCE);
const cookie = String(entry.headers.get('set-cookie')).split(';')[0];
await ask('POST', '/consensus-runs', undefined, cookie);
for (;;) {
    const state = await (await ask('GET', '/consensus-runs/current', undefined, cookie)).json();
    if (state.state === 'idle' && state.newest !== null) break;
    if (state.last_error) throw new Error(`The consensus run failed: ${state.last_error}`);
    if (Date.now() > patience) throw new Error('The consensus run did not end within a minute.');
    await new Promise((resolve) => setTimeout(resolve, 200));
}
