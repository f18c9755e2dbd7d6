#!/bin/sh
# Unpacks Debian's 64-bit Arm zlib (a static library) into build/arm-libraries, where the toolchain
# file looks. The machine's own list of packages and architectures stays as it is.
set -eu

target=$(cd "$(dirname "$0")/.." && pwd)/build/arm-libraries
[ -e "$target/usr/lib/aarch64-linux-gnu/libz.a" ] && exit 0

scratch=$(mktemp -d)
trap 'rm -rf "$scratch"' EXIT
chmod 755 "$scratch"
mkdir -p "$scratch/state/lists/partial" "$scratch/cache/archives/partial" "$target"
cd "$scratch"
arm_apt() {
  apt-get -qq -o Acquire::Retries=3 -o APT::Sandbox::User="$(id -un)" \
    -o Dir::State="$scratch/state" -o Dir::State::status=/dev/null -o Dir::Cache="$scratch/cache" \
    -o APT::Architecture=arm64 -o APT::Architectures=arm64 "$@"
}
# A failing list of some other source must not stop this: the download below decides.
arm_apt update || echo "arm_libraries.sh: some package lists could not be fetched" >&2
arm_apt download zlib1g-dev
dpkg-deb -x zlib1g-dev_*.deb "$target"
rm -rf "$target/usr/share"
