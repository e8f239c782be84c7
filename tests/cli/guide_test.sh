#!/usr/bin/env bash
# guide_test.sh PROGRAM SOURCE: every "$ tapwright ..." line of the README, in order, in an empty
# folder that holds only the samples. 0 and 1 (target missed) are answers; all else fails.
set -euo pipefail
program=$1 source=$2
folder=$(mktemp -d)
trap 'rm -rf "$folder"' EXIT
mkdir "$folder/bin"
ln -s "$program" "$folder/bin/tapwright"
cp -r "$source/channels" "$folder/channels"
cd "$folder"
PATH=$folder/bin:$PATH
count=0
while IFS= read -r line; do
  code=0
  bash -c "$line" >stdout.txt 2>stderr.txt || code=$?
  if ((code > 1)); then
    echo "\$ $line"
    cat stderr.txt
    echo "ended with $code"
    exit 1
  fi
  count=$((count + 1))
done < <(sed -n 's/^\$ \(tapwright .*\)/\1/p' "$source/README.md")
((count > 0)) || { echo "the README shows no command"; exit 1; }
echo "$count commands"
