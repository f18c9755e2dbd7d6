#!/bin/sh
# Installs what is missing, builds the tool, and shows it on the shipped button classifiers. What
# it writes is under out/demo.
set -eu
cd "$(dirname "$0")/.."
. cmake/needs.sh
# shellcheck disable=SC2086,SC2154  # a list of words from needs.sh
need_packages $needs_build

out=out/demo
mkdir -p build "$out"
echo "Building build/release/leadsman (build/demo.log) ..."
if ! {
  cmake --preset release -DLEADSMAN_TESTS=OFF &&
    cmake --build --preset release --parallel "$(nproc)" --target leadsman_tool
} >build/demo.log 2>&1; then
  cat build/demo.log >&2
  exit 1
fi

leadsman=build/release/leadsman
bundles=examples/buttons/bundles
pictures=examples/buttons/pictures
picture=$pictures/odd/walnut_shield_14.jpg

title() { printf '\n== %s\n' "$*"; }

# Shows a command as one would type it, then runs it.
show() {
  printf '\n$ %s\n' "$*"
  "$@"
}

# The same, with all that it prints in a file and the last lines shown.
show_end() {
  file=$1 lines=$2
  shift 2
  printf '\n$ %s >%s\n' "$*" "$file"
  "$@" >"$file" || {
    code=$?
    cat "$file"
    exit $code
  }
  tail -n "$lines" "$file"
}

# count MODEL FOLDER COLUMN: answers of $out/MODEL.FOLDER.jsonl that equal the column of labels.csv.
count() {
  sed 's/.*pictures\/\([^"]*\)".*"label": *"\([^"]*\)".*/\1,\2/' "$out/$1.$2.jsonl" |
    awk -F, -v column="$3" '
      NR == FNR { truth[$1] = $column; next }
      { total += 1; right += truth[$1] == $2 }
      END { printf "%d of %d", right, total }' "$pictures/labels.csv" -
}

title "Buttons whose surface belongs to another kind: outline or surface?"
for model in conv vit; do
  show $leadsman classify $bundles/$model $pictures/odd --top 2
done

title "All shipped pictures: answers that name the kind of the outline, of the surface"
printf '\n%-6s %16s %16s %16s\n' model "ordinary" "odd, outline" "odd, surface"
for model in conv vit; do
  for folder in ordinary odd; do
    $leadsman classify $bundles/$model $pictures/$folder --top 1 --json >"$out/$model.$folder.jsonl"
  done
  printf '%-6s %16s %16s %16s\n' $model "$(count $model ordinary 2)" "$(count $model odd 2)" \
    "$(count $model odd 3)"
done

title "The picture's way to the input, and every layer, against the reference libraries"
for model in conv vit; do
  show_end "$out/verify_$model.txt" 4 \
    $leadsman verify $bundles/$model --image $picture
done

title "What layers see in one picture: values, a sheet of channels, attention heads"
show $leadsman tap $bundles/conv $picture --layers stage1.relu_1 \
  --out "$out/stage1.relu_1.npz" --sheets "$out/sheets"
show $leadsman tap $bundles/vit $picture --heads "$out/heads"

title "Written"
find "$out" -type f | sort
