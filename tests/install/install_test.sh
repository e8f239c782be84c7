#!/usr/bin/env bash
# install_test.sh STEP SOURCE BUILD SCRATCH: one step each of the tests that CMakeLists.txt lists.
set -euo pipefail
step=$1 source=$2 build=$3 scratch=$4
root=$scratch/root
program=$root/usr/bin/tapwright

fail() {
  echo "$*" >&2
  exit 1
}

# Every option of every command, as --help lists them.
options() {
  local command
  for command in $("$program" --help | sed -n '/^Commands$/,/^$/s/^  \([a-z]*\) .*/\1/p'); do
    "$program" "$command" --help | sed -n 's/^  \(--[a-z-]*\).*/\1/p' | sed "s/^/$command /"
  done
}

case $step in
  PacksAndUnpacks)
    rm -rf "$scratch"
    mkdir -p "$root"
    (cd "$build" && cpack -B "$scratch/packages" >"$scratch/cpack.log" 2>&1) ||
      { cat "$scratch/cpack.log"; exit 1; }
    for package in "$scratch"/packages/*.deb; do dpkg-deb -x "$package" "$root"; done
    ls "$scratch"/packages/tapwright_*.deb "$scratch"/packages/tapwright-dev_*.deb
    ;;
  PackagesNameAllTheyNeed)
    depends=$(dpkg-deb -f "$scratch"/packages/tapwright_*.deb Depends)
    echo "Depends: $depends"
    # Each shared library that the loader takes belongs to a package that Depends names.
    while read -r library; do
      # With merged /usr a package may have listed its file under /lib.
      path=$(readlink -f "$library")
      owner=$(dpkg -S "$path" 2>/dev/null || dpkg -S "${path#/usr}")
      owner=${owner%%:*}
      grep -qw -- "$owner" <<<"$depends" || {
        # A library of a library comes with the one that needs it.
        readelf -d "$program" | grep -q "NEEDED.*\[$(basename "$library")\]" &&
          fail "$library of package $owner is needed, but not in Depends"
      }
    done < <(ldd "$program" | sed -n 's/.*=> \(\/[^ ]*\).*/\1/p')
    dpkg-deb -f "$scratch"/packages/tapwright-dev_*.deb Depends | grep -q libeigen3-dev
    ;;
  RunsFromAnEmptyRoot)
    cd /
    env -i "$program" --version | grep -q "^tapwright [0-9]"
    code=0
    env -i "$program" solve "$source/channels/camera_2m.json" --quiet --json "$scratch/solution.json" ||
      code=$?
    ((code <= 1)) || fail "solve ended with $code"
    grep -q '"tapwright.solution/1"' "$scratch/solution.json"
    ;;
  ManualListsEveryOption)
    manual=$(gzip -dc "$root/usr/share/man/man1/tapwright.1.gz" | sed 's/\\-/-/g')
    count=0
    while read -r command option; do
      # The part of the page that belongs to the command.
      section=$(sed -n "/^\.SS \"tapwright $command\b/,/^\.S[SH] /p" <<<"$manual")
      grep -q -- "^\.B $option\b" <<<"$section" || fail "the manual lacks: $command $option"
      count=$((count + 1))
    done < <(options)
    ((count > 20)) || fail "--help listed only $count options"
    ;;
  CompletionsKnowEveryOption)
    completions=$root/usr/share/bash-completion/completions/tapwright
    bash -n "$completions"
    while read -r command option; do
      grep -q -- "$option\b" "$completions" || fail "the completions lack: $command $option"
    done < <(options)
    ;;
  ExampleBuildsOnTheInstalledLibrary)
    cmake -S "$source/channels/library_example" -B "$scratch/example" -G Ninja \
      -DCMAKE_BUILD_TYPE=Release -DCMAKE_PREFIX_PATH="$root/usr" >"$scratch/example.log"
    grep -q "tapwright_DIR:PATH=$root" "$scratch/example/CMakeCache.txt"
    cmake --build "$scratch/example"
    "$scratch/example/margin" "$source/channels/camera_2m.json" "channel.cascade[3].line.length_m" \
      2 | tee "$scratch/out"
    # The same number as the program's.
    program_mv=$("$program" solve "$source/channels/camera_2m.json" --quiet --json - |
      sed -n 's/.*"eye_height_worst_case_mv": \([-0-9.e]*\).*/\1/p' | head -n 1)
    grep -q "$(printf '%.2f mV' "$program_mv")" "$scratch/out" || fail "the program says $program_mv mV"
    ;;
  *) fail "no step $step" ;;
esac
