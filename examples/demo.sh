#!/bin/sh
# Installs what is missing, builds the tool, and shows it on the shipped button classifiers. What
# it writes is under out/demo.
set -eu
cd "$(dirname "$0")/.."
. cmake/needs.sh
# shellcheck disable=SC2086  # a list of words
need_packages $needs_build

log=build/demo.log
mkdir -p build out/demo
echo "Building build/release/leadsman ..."
if ! {
  cmake --preset release -DLEADSMAN_TESTS=OFF &&
    cmake --build --preset release --parallel "$(nproc)" --target leadsman_tool
} >"$log" 2>&1; then
  cat "$log" >&2
  exit 1
fi

# Shows a command as one would type it, then runs it.
show() {
  printf '\n$ %s\n' "$*"
  "$@"
}

leadsman=build/release/leadsman
buttons=examples/buttons
odd=$buttons/pictures/odd
picture=$odd/walnut_shield_14.jpg

echo
echo "Buttons whose surface belongs to another kind, as both models name them:"
for model in conv vit; do
  show $leadsman classify $buttons/bundles/$model $odd
done

echo
echo "Every layer of both models against what the reference library computed:"
for model in conv vit; do
  show $leadsman verify $buttons/bundles/$model \
    --reference $buttons/bundles/$model/reference.safetensors
done

echo
echo "What one layer sees in one picture, as numbers and as a sheet of its channels:"
show $leadsman tap $buttons/bundles/conv $picture --layers 'LAYER' \
  --out out/demo/conv_layer.npz --sheets out/demo/sheets
show $leadsman tap $buttons/bundles/vit $picture --heads out/demo/heads

echo
echo "Written:"
find out/demo -type f | sort
