# shellcheck shell=sh disable=SC2034  # sourced
# For the scripts of this project: `. cmake/needs.sh`, then `need_packages NAME...`.

# Installs the Debian packages that are missing, as root or through sudo when it asks for no
# password. Otherwise prints the line that would install them and ends the script with 2.
# Elsewhere than on Debian and its kin it checks nothing: CMake then says what it does not find.
need_packages() {
  command -v dpkg-query >/dev/null 2>&1 || return 0
  needs_missing=
  for needs_package in "$@"; do
    # shellcheck disable=SC2016  # ${...} is dpkg-query's
    needs_status=$(dpkg-query -W -f='${db:Status-Status}' "$needs_package" 2>/dev/null) || true
    [ "$needs_status" = installed ] || needs_missing="$needs_missing $needs_package"
  done
  [ -n "$needs_missing" ] || return 0

  if [ "$(id -u)" -eq 0 ]; then
    needs_root=
  elif command -v sudo >/dev/null 2>&1 && sudo -n true 2>/dev/null; then
    needs_root="sudo -n"
  else
    echo "Debian packages are missing; install them with" >&2
    echo "  sudo apt-get install$needs_missing" >&2
    exit 2
  fi
  echo "installing:$needs_missing" >&2
  # A list that cannot be fetched (some other source of the machine's) need not matter.
  $needs_root apt-get -qq -o Acquire::Retries=3 update >&2 || true
  # shellcheck disable=SC2086  # word splitting is meant
  $needs_root env DEBIAN_FRONTEND=noninteractive apt-get -qq -o Acquire::Retries=3 \
    -o DPkg::Lock::Timeout=300 install -y --no-install-recommends $needs_missing >&2
}

# What the tool and the library are built with.
needs_build="cmake ninja-build g++ libhwy-dev nlohmann-json3-dev libstb-dev libcli11-dev"
# What their tests need beside that.
needs_tests="libgtest-dev python3 python3-torch python3-torchvision python3-numpy python3-pil"
needs_tests="$needs_tests python3-scipy python3-sklearn python3-jsonschema"
# The page of a sweep is looked at by a browser.
needs_tests="$needs_tests python3-selenium chromium-driver"
# Without it Debian's PyTorch multiplies matrices with the reference BLAS, some twenty times slower.
needs_tests="$needs_tests libopenblas0-openmp"
# The cross build for Arm boards, and what runs it here.
needs_board="g++-aarch64-linux-gnu qemu-user-static googletest python3"
# The other compiler and the checkers.
needs_checks="clang-14 clang-tidy-14 clang-format-14 python3"
