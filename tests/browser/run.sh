#!/usr/bin/env bash
# The tests of the pages, printed as TAP: the types of web/, its modules in node, and the pages in
# Chromium against the program itself.
#   EBBMARK_PROGRAM   the program (build/release/ebbmark)
#   EBBMARK_URL       a server that is up already, instead of one started here
set -euo pipefail
here=$(cd "$(dirname "$0")" && pwd)
program=$(realpath "${EBBMARK_PROGRAM:-$here/../../build/release/ebbmark}")
place=$(mktemp -d /tmp/ebbmark-pages-XXXXXX)
server_pid=

tidy() {
    if [ -n "$server_pid" ] && kill -0 "$server_pid" 2>/dev/null; then
        kill "$server_pid" 2>/dev/null || true
        wait "$server_pid" 2>/dev/null || true
    fi
    rm -rf "$place"
}
trap tidy EXIT
trap 'exit 130' INT TERM
cd "$here"

if ! [ -x node_modules/.bin/tsc ] || [ package-lock.json -nt node_modules/.package-lock.json ]; then
    npm ci --no-audit --no-fund --loglevel=error || {
        echo "not ok - what the pages' tests need can be had from the npm registry"
        exit 1
    }
fi

if node_modules/.bin/tsc --project tsconfig.json; then
    echo "ok - the types of web/ and of its tests hold"
else
    echo "not ok - the types of web/ and of its tests hold"
    exit 1
fi
node --test --test-reporter=tap unit/*.test.mjs

start_server() {
    "$program" invent --output "$place/survey" --seed 11
    "$program" load --database "$place/campaign.db" --batch Reedbed --stars "$place/survey/stars.csv" \
        "$place/survey/light-curves"
    EBBMARK_SCIENCE_HANDLE=pages-keeper
    EBBMARK_SCIENCE_PASSPHRASE=$(head -c 12 /dev/urandom | base64 | tr '+/' 'ab')
    export EBBMARK_SCIENCE_HANDLE EBBMARK_SCIENCE_PASSPHRASE
    printf '%s\n' "$EBBMARK_SCIENCE_PASSPHRASE" |
        "$program" person --database "$place/campaign.db" --add "$EBBMARK_SCIENCE_HANDLE" --role science
    "$program" serve --database "$place/campaign.db" --listen 127.0.0.1:0 \
        >"$place/server.out" 2>"$place/server.log" &
    server_pid=$!
    for _ in $(seq 100); do
        EBBMARK_URL=$(sed -n 's/.*\(http:\/\/127\.0\.0\.1:[0-9]*\).*/\1/p' "$place/server.out" | head -n 1)
        if [ -n "$EBBMARK_URL" ]; then
            export EBBMARK_URL
            "$program" rehearse --server "$EBBMARK_URL" --reviewers 8
            return 0
        fi
        kill -0 "$server_pid" 2>/dev/null || break
        sleep 0.1
    done
    cat "$place/server.log"
    return 1
}
if [ -z "${EBBMARK_URL:-}" ]; then
    start_server >"$place/start.log" 2>&1 || {
        sed 's/^/# /' "$place/start.log"
        echo "not ok - the program serves an invented survey to the pages' tests"
        exit 1
    }
fi

# The candidates come from a run that the tests of Candidates need to be there.
node first-run.mjs
node --test --test-reporter=tap --test-concurrency=2 ./*.test.mjs
