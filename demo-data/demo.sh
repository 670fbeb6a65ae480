#!/usr/bin/env bash
# The whole job on the invented Long Reach survey, start to finish, on this machine's loopback.
#   demo.sh PROGRAM serve|once
set -euo pipefail
program=$(realpath "$1")
mode=$2
data=$(cd "$(dirname "$0")" && pwd)
cd "$data/.."
place=build/demo
database=$place/campaign.db
server_pid=

tidy() {
    if [ -n "$server_pid" ] && kill -0 "$server_pid" 2>/dev/null; then
        kill "$server_pid" 2>/dev/null || true
        wait "$server_pid" 2>/dev/null || true
    fi
}
trap tidy EXIT
trap 'exit 130' INT TERM

say() { printf '\n%s\n' "$*"; }

rm -rf "$place"
mkdir -p "$place"

say "1. Loading the Long Reach survey's field Reedbed (all of it invented)."
"$program" load --database "$database" --batch Reedbed --stars "$data/stars.csv" "$data/light-curves"

say "2. Adding an admin, and opening the server on loopback."
passphrase=$(head -c 12 /dev/urandom | base64 | tr '+/' 'ab')
printf '%s\n' "$passphrase" | "$program" person --database "$database" --add keeper --role admin
token=$("$program" person --database "$database" --token keeper --days 1)

# Port 8080 where it is free, any other where it is not.
start_server() {
    "$program" serve --database "$database" --listen "127.0.0.1:$1" \
        >"$place/server.out" 2>"$place/server.log" &
    server_pid=$!
    for _ in $(seq 100); do
        address=$(sed -n 's/.*\(http:\/\/127\.0\.0\.1:[0-9]*\).*/\1/p' "$place/server.out" | head -n 1)
        [ -z "$address" ] || return 0
        kill -0 "$server_pid" 2>/dev/null || return 1
        sleep 0.1
    done
    return 1
}
start_server 8080 || start_server 0 || {
    cat "$place/server.log" >&2
    exit 1
}
echo "It serves at $address/"

say "3. Rehearsal reviewers look at what the server hands them, and answer over HTTP."
"$program" rehearse --server "$address" --reviewers 24

say "4. Running the consensus."
ask() { curl -sS --fail-with-body -H "Authorization: Bearer $token" "$@"; }
run_ends() {
    for _ in $(seq 600); do
        state=$(ask "$address/api/v1/consensus-runs/current")
        case $state in *'"working"'*) sleep 0.2 ;; *) return 0 ;; esac
    done
    echo "The consensus run did not end within two minutes; see $place/server.log." >&2
    return 1
}
# The reviews may have started a run by themselves; ours comes after it, over all of them.
run_ends
for _ in $(seq 20); do
    answer=$(ask -X POST "$address/api/v1/consensus-runs" 2>&1) && break
    case $answer in *409*) run_ends ;; *) echo "$answer" >&2; exit 1 ;; esac
done
run_ends
ask "$address/api/v1/candidates?format=csv&sort=-probability" >"$place/candidates.csv"

say "5. The top of the ranked list. The last column is the demo's own truth, which no reviewer saw."
awk -v truth="$data/truth.csv" -f "$data/compare.awk" "$place/candidates.csv"
echo "The whole list: $place/candidates.csv"
echo "A candidate is not a confirmed planet: eclipsing binaries and instrument artefacts remain among"
echo "them, and only independent follow-up confirms one."

if [ "$mode" = once ]; then
    exit 0
fi
say "The server stays open until Ctrl-C."
echo "  Review:      $address/            (look around as a guest)"
echo "  Candidates:  $address/candidates  (sign in as keeper, passphrase $passphrase)"
wait "$server_pid"
