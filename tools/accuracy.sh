#!/usr/bin/env bash
# What each method reaches on the simulated scenarios: the comparison table of the README. Arguments go to
# kedge-accuracy (see --help), for instance: tools/accuracy.sh --scenario triangle --runs 300
set -euo pipefail
here=$PWD
cd "$(dirname "$0")/.."
source tools/set_up.sh
need_packages "${build_packages[@]}"
cmake --preset release >/dev/null
cmake --build --preset release --target kedge-accuracy >&2
root=$PWD
cd "$here"
exec "$root/build/release/tools/kedge-accuracy" "$@"
