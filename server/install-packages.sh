#!/bin/sh
# Install the Debian packages named that are not there yet; do nothing, and say nothing, when all are.
#   install-packages.sh PURPOSE PACKAGE...      a package written command:package is wanted only when
#                                               there is no such command, whoever installed it
set -eu
purpose=$1
shift
missing=
for wanted in "$@"; do
    package=${wanted#*:}
    case $wanted in
    *:*)
        command -v "${wanted%%:*}" >/dev/null 2>&1 || missing="$missing $package"
        ;;
    *)
        [ "$(dpkg-query -W -f '${db:Status-Status}' "$package" 2>/dev/null)" = installed ] ||
            missing="$missing $package"
        ;;
    esac
done
[ -n "$missing" ] || exit 0
if ! command -v apt-get >/dev/null 2>&1; then
    echo "To $purpose these Debian packages are needed; install their like on your system:$missing" >&2
    exit 1
fi
sudo=
if [ "$(id -u)" != 0 ]; then
    command -v sudo >/dev/null 2>&1 || {
        echo "To $purpose these packages are needed; as root: apt-get install$missing" >&2
        exit 1
    }
    sudo=sudo
fi
echo "Installing what is needed to $purpose:$missing"
log=$(mktemp)
if ! { $sudo apt-get update -q && $sudo env DEBIAN_FRONTEND=noninteractive \
    apt-get install -y -q --no-install-recommends $missing; } >"$log" 2>&1; then
    cat "$log" >&2
    rm -f "$log"
    echo "The packages could not be installed; apt-get says why above." >&2
    exit 1
fi
rm -f "$log"
