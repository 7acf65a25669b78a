#!/usr/bin/env bash
# The main job on the demo site, from nothing: installs what it needs, builds, and follows six tags of an
# invented tree nursery, one of them over a serial line.
#
#   tools/demo.sh                          until Ctrl-C, tags live in the terminal
#   tools/demo.sh --headless --seconds N   N seconds, one JSON summary as the last line; exit code 0 only if every
#                                          cart is settled with at most 2 m RMS over the second half
#
# Leaves capture.pcapng, feed.jsonl and truth.csv in build/demo/.
set -euo pipefail
cd "$(dirname "$0")/.."
source tools/set_up.sh

headless=no
seconds=
usage() { echo "usage: tools/demo.sh [--headless --seconds N]   (N from 20 to 3600)" >&2; exit 2; }
while [ $# -gt 0 ]; do
  case "$1" in
    --headless) headless=yes ;;
    --seconds) seconds=${2:-}; shift || usage ;;
    *) usage ;;
  esac
  shift
done
if [ -n "$seconds" ]; then
  [[ "$seconds" =~ ^[0-9]+$ ]] && [ "$seconds" -ge 20 ] && [ "$seconds" -le 3600 ] || usage
elif [ $headless = yes ]; then
  usage
fi

need_packages "${build_packages[@]}" python3
cmake --preset release >&2
cmake --build --preset release --target kedged kedge-simulate kedge-lookout kedge-evaluate kedge-replay kedge-tell >&2

bin=build/release
out=build/demo
rm -rf $out
mkdir -p $out
children=()
stop() {
  local child
  for child in "${children[@]}"; do kill -TERM "$child" 2>/dev/null || true; done
  for child in "${children[@]}"; do wait "$child" 2>/dev/null || true; done
  children=()
}
trap stop EXIT

$bin/daemon/kedged config/demo.txtpb 2>$out/kedged.log &
children+=($!)
daemon=$!
for _ in $(seq 100); do
  grep -q ' ready: ' $out/kedged.log && break
  if ! kill -0 $daemon 2>/dev/null; then cat $out/kedged.log >&2; exit 1; fi
  sleep 0.1
done

duration=(${seconds:+--seconds $seconds})
$bin/tools/kedge-simulate --site config/demo.txtpb --seed 22 --udp 127.0.0.1:47800 --pty $out/serial --serial-tag cart-5 \
  --truth $out/truth.csv "${duration[@]}" 2>$out/simulate.log &
children+=($!)

lookout=($bin/tools/kedge-lookout --connect 127.0.0.1:47810 --record $out/feed.jsonl --summary $out/lookout.json "${duration[@]}")
if [ $headless = yes ]; then
  "${lookout[@]}" >$out/lookout.txt
else
  echo "Positions are estimates; Ctrl-C ends." >&2
  trap ':' INT
  "${lookout[@]}" || true
fi
stop

ln $out/captures/*.pcapng $out/capture.pcapng
$bin/tools/kedge-evaluate $out/feed.jsonl $out/truth.csv --second-half --json >$out/figures.jsonl
if [ $headless = yes ]; then
  python3 -B tools/demo_summary.py $out/figures.jsonl $out/lookout.json
else
  $bin/tools/kedge-evaluate $out/feed.jsonl $out/truth.csv --second-half
fi
