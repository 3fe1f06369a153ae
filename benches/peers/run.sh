#!/usr/bin/env bash
# Compares our solver with IPOPT on generated networks: benches/peers/run.sh [SIZES] [SEEDS] [ROUNDS]
# Needs python3 with venv; makes its own environment and data under target/peers.
set -euo pipefail
here=$(cd "$(dirname "$0")" && pwd)
root=$(cd "$here/../.." && pwd)
sizes=${1:-"30 100 300 1000"} seeds=${2:-"1 2 3"} rounds=${3:-5}
work=${PEERS_WORK:-$root/target/peers}
mkdir -p "$work"
if [ ! -x "$work/venv/bin/python" ]; then
    python3 -m venv "$work/venv"
    "$work/venv/bin/pip" install --quiet numpy==2.4.6 scipy==1.17.1 casadi==3.8.2
fi
files=()
for n in $sizes; do
    for seed in $seeds; do
        file="$work/network-$n-$seed.json"
        [ -f "$file" ] || "$work/venv/bin/python" "$here/generate.py" "$n" "$seed" "$file"
        files+=("$file")
    done
done
binary=$(cd "$root" && cargo bench --bench peers --no-run --message-format=json-render-diagnostics |
    "$work/venv/bin/python" -c 'import json, sys
for line in sys.stdin:
    message = json.loads(line)
    if message.get("executable") and message["target"]["name"] == "peers":
        print(message["executable"])')
"$work/venv/bin/python" "$here/compare.py" "$binary" "$rounds" "${files[@]}"
