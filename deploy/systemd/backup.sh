#!/bin/sh
# Makes one verified copy of the database and removes the oldest ones. Goes to
# /usr/local/lib/counterpoise/backup.sh; counterpoise-backup.service sets
# DATABASE, COPIES (a folder) and KEEP (how many copies stay).
set -eu

: "${DATABASE:?the database}" "${COPIES:?the folder of copies}" "${KEEP:?how many stay}"
program=${COUNTERPOISE:-counterpoise}
case $KEEP in
    '' | *[!0-9]* | 0) echo "KEEP has to be a number from 1, not $KEEP" >&2; exit 2 ;;
esac

# The program names the file only after it has verified it: what carries the name
# is whole, and a copy that fails leaves the older ones alone.
"$program" backup --database "$DATABASE" "$COPIES/counterpoise-$(date -u +%Y%m%dT%H%M%SZ).sqlite"

# The names sort by time. Only names of this form are ever removed.
find "$COPIES" -maxdepth 1 -type f \
    -name 'counterpoise-[0-9][0-9][0-9][0-9][0-9][0-9][0-9][0-9]T[0-9][0-9][0-9][0-9][0-9][0-9]Z.sqlite' |
    sort -r | tail -n "+$((KEEP + 1))" |
    while IFS= read -r old; do rm -f -- "$old"; done
