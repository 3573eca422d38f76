#!/usr/bin/env bash
# Builds and runs every test: the release build, then the same tests with the address and
# undefined-behaviour sanitizers at a smaller size. Installs what is missing first.
#
#   bash tests/run.sh            all
#   bash tests/run.sh release    the release build alone (or: asan-ubsan, debug, tsan)
set -euo pipefail
cd "$(dirname "$0")/.."
bash apps/needs.sh

jobs=$(nproc)
if command -v ccache >/dev/null; then
  export CMAKE_CXX_COMPILER_LAUNCHER=ccache
fi

run() {
  local preset=$1
  shift
  cmake --preset "$preset" -DDUSKGRID_TESTS=ON >/dev/null
  cmake --build --preset "$preset" -j "$jobs" | tail -n 1
  ctest --preset "$preset" -j "$jobs" --quiet --output-on-failure "$@" || {
    ctest --preset "$preset" --rerun-failed --output-on-failure
    echo "tests/run.sh: the $preset tests failed" >&2
    return 1
  }
  echo "$preset: all tests passed"
}

if [ $# -gt 0 ]; then
  for preset in "$@"; do run "$preset"; done
  exit 0
fi
run release
# The sanitizers make everything several times slower: smaller samples, the same code.
DUSKGRID_FUZZ_RUNS=300 DUSKGRID_ORACLE_POINTS=1000 run asan-ubsan
