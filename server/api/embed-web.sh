#!/bin/sh
# embed-web.sh WEB OUT: a C source on standard output that carries every file of WEB and the interface's
# description, plain and compressed, each with an ETag from its content.
set -eu
web=$1
out=$2
mkdir -p "$out/gzip"

# One array of bytes from the assembler's own reader: NAME FILE.
bytes() {
    printf '__asm__(".section .rodata\\n.global %s\\n.balign 16\\n%s:\\n.incbin \\"%s\\"\\n.byte 0\\n.previous\\n");\n' \
        "$1" "$1" "$(realpath "$2")"
    printf 'extern const unsigned char %s[];\n' "$1"
}

media_type() {
    case $1 in
    *.html) echo 'text/html; charset=utf-8' ;;
    *.js | *.mjs) echo 'text/javascript; charset=utf-8' ;;
    *.css) echo 'text/css; charset=utf-8' ;;
    *.svg) echo 'image/svg+xml' ;;
    *.json) echo 'application/json' ;;
    *.txt) echo 'text/plain; charset=utf-8' ;;
    *) echo 'application/octet-stream' ;;
    esac
}

echo '#include "ebbmark/http.h"'
echo 'extern const struct http_static_file web_files[];'
echo 'extern const size_t web_file_count;'
number=0
rows=
newline='
'
for file in $(find "$web" -type f ! -name '.*' | LC_ALL=C sort); do
    number=$((number + 1))
    packed="$out/gzip/$number.gz"
    gzip -9nc "$file" >"$packed"
    size=$(wc -c <"$file")
    small=$(wc -c <"$packed")
    etag=$(sha256sum "$file" | cut -c 1-32)
    bytes "web_plain_$number" "$file"
    gzip_name=NULL
    gzip_size=0
    if [ "$small" -lt "$size" ]; then
        bytes "web_gzip_$number" "$packed"
        gzip_name=web_gzip_$number
        gzip_size=$small
    fi
    rows="$rows    {\"${file#"$web"}\", \"$(media_type "$file")\", web_plain_$number, $size, $gzip_name, $gzip_size, \"\\\"$etag\\\"\"},$newline"
done
printf 'const struct http_static_file web_files[] = {\n%s    {NULL, NULL, NULL, 0, NULL, 0, NULL}};\n' "$rows"
echo "const size_t web_file_count = $number;"
description=$(dirname "$0")/openapi.json
printf '__asm__(".section .rodata\\n.global openapi_text\\nopenapi_text:\\n.incbin \\"%s\\"\\n.byte 0\\n.previous\\n");\n' \
    "$(realpath "$description")"
echo 'extern const size_t openapi_size;'
echo "const size_t openapi_size = $(wc -c <"$description");"
