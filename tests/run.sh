#!/usr/bin/env bash
# Builds and runs every test: the release build, then the same tests with the address and
# undefined-behaviour sanitizers at a smaller size. Installs what is missing first.
#
#   bash tests/run.sh            all
#   bash tests/run.sh release    the release build alone (or: asan-ubsan, debug, tsan)
set -euo pipefail
cd "$(dirname "$0")/.."
# A browser and what drives it, for the tests of the report.
bash apps/needs.sh chromium fonts-dejavu-core nodejs

jobs=$(nproc)
if command -v ccache >/dev/null; then
  export CMAKE_CXX_COMPILER_LAUNCHER=ccache
fi

# Runs a command with its output in a file, shown only when it fails.
quietly() {
  local log=$1
  shift
  "$@" >"$log" 2>&1 || {
    grep -E -A4 'error|FAILED' "$log" | head -n 60 >&2 || true
    echo "failed: $* (all of it in $log)" >&2
    return 1
  }
}

# run PRESET [TARGET ...]: all programs of a preset, or some.
run() {
  local preset=$1 some=()
  shift
  [ $# -eq 0 ] || some=(--target "$@")
  cmake --preset "$preset" -DDUSKGRID_TESTS=ON >/dev/null
  echo "$preset: building"
  quietly "build/$preset/build.log" cmake --build --preset "$preset" -j "$jobs" "${some[@]}"
  echo "$preset: testing"
  ctest --preset "$preset" -j "$jobs" --quiet -E NOT_BUILT || {
    ctest --preset "$preset" --rerun-failed -E NOT_BUILT
    echo "tests/run.sh: the $preset tests failed" >&2
    return 1
  }
  echo "$preset: $(ctest --preset "$preset" -N -E NOT_BUILT | tail -n 1 | tr -dc 0-9) tests passed"
}

if [ $# -gt 0 ]; then
  for preset in "$@"; do run "$preset"; done
  exit 0
fi
run release
# The sanitizers make everything several times slower: smaller samples, and of the programs those
# that take hostile input or run the whole night. `bash tests/run.sh asan-ubsan` has them all.
DUSKGRID_FUZZ_RUNS=120 DUSKGRID_CHAIN_SEEDS=38 DUSKGRID_KILLS=4 \
  run asan-ubsan fuzz unit_quotes unit_night end_to_end
