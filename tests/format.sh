#!/bin/sh
# Fails, showing where, when a C++ file is not laid out as .clang-format says.
#
#   sh tests/format.sh [--fix]
set -eu
cd "$(dirname "$0")/.."
. cmake/needs.sh
need_packages clang-format-14

case ${1-} in
  --fix) how=-i ;;
  '') how='--dry-run -Werror' ;;
  *) sed -n '4s/^# *//p' tests/format.sh >&2; exit 2 ;;
esac
# shellcheck disable=SC2086  # a list of words
git ls-files -z '*.cc' '*.h' | xargs -0 clang-format-14 $how
