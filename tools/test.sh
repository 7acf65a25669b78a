#!/usr/bin/env bash
# The whole suite, from nothing: installs what it needs, builds, tests.
#
#   tools/test.sh           everything: g++ build and tests, format, lint, clang build under sanitizers, fuzz smoke
#   tools/test.sh --quick   the fast half: g++ build, unit and outside tests
#
# Open recordings are used where KEDGE_DATASETS names their folder.
set -euo pipefail
cd "$(dirname "$0")/.."
source tools/set_up.sh

quick=no
case "${1:-}" in
  "") ;;
  --quick) quick=yes ;;
  *) echo "usage: tools/test.sh [--quick]" >&2; exit 2 ;;
esac

step() { printf '\n== %s (%s s)\n' "$1" "$SECONDS"; }

step "packages"
need_packages "${build_packages[@]}" catch2 python3 python3-protobuf tshark socat
if [ $quick = no ]; then
  need_packages clang-16 clang-tidy-16 clang-format-16 libclang-rt-16-dev systemd
fi

step "build with g++"
cmake --preset release >/dev/null
cmake --build --preset release

step "tests, quick half"
ctest --preset release -L quick -j2
if [ $quick = yes ]; then exit 0; fi

step "tests, full half"
ctest --preset release -L full

step "format"
git ls-files -z '*.h' '*.cpp' | xargs -0 clang-format-16 --dry-run --Werror

step "build with clang and sanitizers"
cmake --preset sanitize >/dev/null
cmake --build --preset sanitize
ctest --preset sanitize -L 'quick|fuzz' -j2

step "lint"
tools/lint.sh build/sanitize

step "done"
