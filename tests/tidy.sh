#!/bin/sh
# Runs clang-tidy over the files given, else over a sample that takes a minute or two and includes
# every public header. Not in the sample: operators (many, alike), vector kernels and the command
# line (Highway's and CLI11's headers take ten times as long as the code itself).
#
#   sh tests/tidy.sh [FILE.cc...]
set -eu
cd "$(dirname "$0")/.."
. cmake/needs.sh
# shellcheck disable=SC2086  # lists of words
need_packages $needs_build $needs_checks

# Only what the compiler is told matters here: nothing is built.
cmake --preset clang -DLEADSMAN_TESTS=OFF >/dev/null
if [ $# -eq 0 ]; then
  # shellcheck disable=SC2046  # no name has a blank
  set -- $(git ls-files 'core/*.cc' 'engine/*.cc' 'loaders/*.cc' 'observe/*.cc')
fi
printf '%s\n' "$@" | xargs -P "$(nproc)" -n 4 clang-tidy-14 -p build/clang --quiet
