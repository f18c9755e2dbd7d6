#!/bin/sh
# Builds the tool and the kernel tests for 64-bit Arm, runs the tests under emulation, and holds
# the Arm tool against this machine's: the same labels and probabilities for the shipped pictures,
# and every layer within its threshold of the shipped reference.
#
#   sh tests/board.sh [-- CMAKE_OPTION...]
set -eu
cd "$(dirname "$0")/.."
. cmake/needs.sh
[ "${1-}" != -- ] || shift

jobs=$(nproc)
# shellcheck disable=SC2086  # lists of words
need_packages $needs_build $needs_board

cmake --preset aarch64 -DLEADSMAN_TESTS=ON "$@"
cmake --build --preset aarch64 --parallel "$jobs" \
  --target leadsman_tool core_test ops_test engine_test
cmake --preset release
cmake --build --preset release --parallel "$jobs" --target leadsman_tool

ctest --preset aarch64 --parallel "$jobs" --label-regex 'core|ops|engine'

python=/usr/bin/python3
[ -x "$python" ] || python=python3
buttons=examples/buttons
for model in conv vit; do
  bundle=$buttons/bundles/$model
  "$python" tests/board_compare.py --bundle "$bundle" \
    --host build/release/leadsman --board build/aarch64/leadsman \
    "$buttons"/pictures/ordinary/*_0[0-2].* "$buttons"/pictures/odd
  qemu-aarch64-static -cpu cortex-a53 build/aarch64/leadsman verify "$bundle" \
    --reference "$bundle/reference.safetensors"
done
