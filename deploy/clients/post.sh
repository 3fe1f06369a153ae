#!/bin/sh
# Posts one file of readings with curl, compressed, and tries again for as long as
# the service asks for patience.
#
#   post.sh http://127.0.0.1:8080 gannet-holm readings.csv
#
# The file is NDJSON (.ndjson), JSON (.json) or CSV with a header (.csv); - takes
# CSV from standard input. TOKEN_FILE names a file with a token, where the service
# has tokens. The same file may be sent twice: what is known is not counted twice.
# Exit code: 0 taken, the answer on standard output; 1 refused, the reason on
# standard output; 2 wrong command line; 3 not taken in time.
set -eu

if [ $# -ne 3 ]; then
    echo "usage: post.sh URL PLANT FILE" >&2
    exit 2
fi
url=${1%/} plant=$2 file=$3
case $file in
    *.ndjson) type=application/x-ndjson ;;
    *.json) type=application/json ;;
    *.csv | -) type=text/csv ;;
    *) echo "post.sh: $file is neither .ndjson nor .json nor .csv" >&2; exit 2 ;;
esac

folder=$(mktemp -d)
trap 'rm -rf "$folder"' EXIT
umask 077
if [ "$file" = - ]; then gzip -nc >"$folder/body"; else gzip -nc "$file" >"$folder/body"; fi
# In a file: an argument can be read by every user of the machine.
: >"$folder/headers"
if [ -n "${TOKEN_FILE:-}" ]; then
    printf 'Authorization: Bearer %s\n' "$(cat "$TOKEN_FILE")" >"$folder/headers"
fi

# curl waits as long as Retry-After says, and takes 408, 429, 500, 502, 503 and
# 504 as reasons to try again (curl(1), --retry).
status=$(curl --silent --show-error --output "$folder/answer" --write-out '%{http_code}' \
    --retry "${RETRIES:-20}" --retry-connrefused --retry-max-time "${PATIENCE:-600}" \
    --connect-timeout 10 --max-time 120 \
    --header "@$folder/headers" --header "Content-Type: $type" --header 'Content-Encoding: gzip' \
    --data-binary "@$folder/body" "$url/v1/plants/$plant/readings") || status=000
[ -f "$folder/answer" ] && cat "$folder/answer" && echo
case $status in
    2??) exit 0 ;;
    000 | 408 | 429 | 5??) echo "post.sh: not taken in time (status $status)" >&2; exit 3 ;;
    *) echo "post.sh: refused (status $status)" >&2; exit 1 ;;
esac
