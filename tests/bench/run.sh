#!/usr/bin/env bash
# Run every bench and print what each measured: ratios against the bare library in the same run. Changes
# nothing, asserts nothing; the machine may be noisy, so look at ratios and not at seconds.
#   run.sh BUILD [NAME...]
set -uo pipefail
build=$1
shift
cd "$(dirname "$0")/../.."
names=("$@")
if [ ${#names[@]} -eq 0 ]; then
    for source in tests/bench/*.c; do
        names+=("$(basename "$source" .c)")
    done
fi
for name in "${names[@]}"; do
    case $name in
    evaluate | *_driver) continue ;; # those have a script or a target of their own
    esac
    printf '\n== %s\n' "$name"
    timeout 600 "$build/tests/bench/$name" || echo "$name ended with status $?"
done
for script in tests/bench/*.py; do
    [ -e "$script" ] || continue
    printf '\n== %s\n' "$(basename "$script" .py)"
    EBBMARK_BUILD=$build timeout 900 /usr/bin/python3 "$script" || echo "$script ended with status $?"
done
