#!/bin/sh
# embed-migrations.sh FOLDER: a C source on standard output that carries FOLDER/NNNN_name.sql in order.
set -eu
echo '#include "server/store/migrations.h"'
echo '#include <stddef.h>'
# A migration is longer than the strings that ISO C obliges compilers to take; ours do.
echo '#pragma GCC diagnostic ignored "-Woverlength-strings"'
echo 'const struct store_migration store_migrations[] = {'
expected=1
for file in "$1"/[0-9][0-9][0-9][0-9]_*.sql; do
    name=$(basename "$file" .sql)
    version=$(printf '%s' "${name%%_*}" | sed 's/^0*//')
    if [ "$version" != "$expected" ]; then
        echo "migration $expected is missing before $file" >&2
        exit 1
    fi
    expected=$((expected + 1))
    printf '    {%s, "%s",\n' "$version" "$name"
    sed -e 's/\\/\\\\/g' -e 's/"/\\"/g' -e 's/^/     "/' -e 's/$/\\n"/' "$file"
    echo '    },'
done
echo '    {0, NULL, NULL}};'
