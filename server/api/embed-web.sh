#!/bin/sh
# embed-web.sh WEB OUT: a C source on standard output that carries every file of WEB and openapi.json, plain
# and compressed, each with an ETag from its content. The compressed forms are kept under OUT.
set -eu
web=$(realpath "$1")
mkdir -p "$2/gzip"
packed=$(realpath "$2/gzip")
description=$(realpath "$(dirname "$0")/openapi.json")

media_type() {
    case $1 in
    *.html) echo 'text/html; charset=utf-8' ;;
    *.js) echo 'text/javascript; charset=utf-8' ;;
    *.css) echo 'text/css; charset=utf-8' ;;
    *.svg) echo 'image/svg+xml' ;;
    *.png) echo 'image/png' ;;
    *.json) echo 'application/json' ;;
    *.txt) echo 'text/plain; charset=utf-8' ;;
    *.webmanifest) echo 'application/manifest+json' ;;
    *.woff2) echo 'font/woff2' ;;
    *)
        echo "$1: embed-web.sh knows no media type for this file." >&2
        exit 1
        ;;
    esac
}

# Bytes read by the assembler: NAME FILE.
bytes() {
    printf '__asm__(".section .rodata\\n.global %s\\n.balign 16\\n%s:\\n.incbin \\"%s\\"\\n.previous\\n");\n' \
        "$1" "$1" "$2"
    printf 'extern const unsigned char %s[];\n' "$1"
}

# The bytes of one file, and at the end of file $rows its row: NAME FILE PATH.
embed() {
    gzip -9nc "$2" >"$packed/$1.gz"
    size=$(wc -c <"$2")
    small=$(wc -c <"$packed/$1.gz")
    bytes "embedded_$1" "$2"
    gzip=NULL
    if [ "$small" -lt "$size" ]; then
        bytes "embedded_$1_gzip" "$packed/$1.gz"
        gzip="embedded_$1_gzip"
    else
        small=0
    fi
    type=$(media_type "$3")
    etag=$(sha256sum <"$2" | cut -c 1-32)
    printf '    {"%s", "%s", embedded_%s, %d, %s, %d, "\\"%s\\""},\n' \
        "$3" "$type" "$1" "$size" "$gzip" "$small" "$etag" >>"$rows"
}

rows=$packed/rows
: >"$rows"
echo '#include "server/api/embedded.h"'
number=0
# What serves those who work on the pages is not for those who look at them.
find "$web" -name node_modules -prune -o -type f ! -name '.*' ! -name '*.md' ! -name '*.d.ts' \
    ! -name 'package*.json' ! -name '*sconfig.json' -print | LC_ALL=C sort >"$packed/files"
while IFS= read -r file; do
    number=$((number + 1))
    embed "$number" "$file" "${file#"$web"}"
done <"$packed/files"
echo 'const struct http_static_file web_files[] = {'
cat "$rows"
echo '    {NULL, NULL, NULL, 0, NULL, 0, NULL}};'
echo "const size_t web_file_count = $number;"
: >"$rows"
embed description "$description" /api/v1/openapi.json
echo 'const struct http_static_file api_description ='
sed -e 's/,$/;/' "$rows"
