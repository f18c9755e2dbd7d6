#!/bin/sh
# Installs what is missing, builds, and runs the tests.
#
#   sh tests/run.sh [--asan] [--tsan] [--board] [--all] [-- CMAKE_OPTION...]
#
# Without an option: the release build. --asan and --tsan: the same tests under the address and
# undefined-behaviour sanitizers, the engine's under the thread sanitizer. --board: the Arm build
# under emulation. --all: each of them, the release build last, with every architecture that the
# reference library has instead of one of each family (an hour, 16 GB). Ends with what ctest says.
set -eu
cd "$(dirname "$0")/.."
. cmake/needs.sh

usage() {
  sed -n '4,9s/^# \{0,1\}//p' tests/run.sh >&2
  exit 2
}

suites=
while [ $# -gt 0 ]; do
  case $1 in
    --asan | --tsan | --board) suites="$suites ${1#--}" ;;
    --all)
      suites="$suites asan tsan board release"
      export LEADSMAN_ALL_ARCHITECTURES=1
      ;;
    --help | -h) usage ;;
    --) shift; break ;;
    *) echo "tests/run.sh: unknown option $1" >&2; usage ;;
  esac
  shift
done

jobs=$(nproc)
case $suites in *asan*) needs_tests="$needs_tests clang-14 libclang-rt-14-dev" ;; esac
# shellcheck disable=SC2086  # lists of words
need_packages $needs_build $needs_tests

build() {
  preset=$1
  shift
  # shellcheck disable=SC2086
  cmake --preset "$preset" -DLEADSMAN_TESTS=ON $cmake_options
  cmake --build --preset "$preset" --parallel "$jobs" --target "$@"
}

cmake_options=$*
for name in ${suites:-release}; do
  case $name in
    release)
      build release all
      ctest --preset release --parallel "$jobs"
      ;;
    asan)
      build asan all
      # Python would have to be run under the sanitizer's library as well.
      ctest --preset asan --parallel "$jobs" --label-exclude python
      ;;
    tsan)
      build tsan core_test engine_test
      ctest --preset tsan --parallel "$jobs" --label-regex 'core|engine'
      ;;
    board)
      sh tests/board.sh
      ;;
  esac
done
