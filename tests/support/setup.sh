# Sourced by tests/run, channels/demo and bench/run: installs the Debian packages that are missing
# and builds. Sets nothing up that is already there, so that a second call is quick.
#
#   need_packages PACKAGE...          install what is missing, or stop with the list
#   build DIRECTORY TARGET... [-- CMAKE_OPTION...]

packages_to_build=(libjs-chart.js cmake g++ libboost-dev libcli11-dev libeigen3-dev libnlopt-cxx-dev libssl-dev
                   ninja-build nlohmann-json3-dev pkg-config)
packages_to_test=(chromium chromium-driver clang dpkg-dev file gcovr libbenchmark-dev libc6-dbg libclang-rt-14-dev
                  libgtest-dev llvm-14 ngspice python3-numpy python3-scipy valgrind)

say() { printf '%s\n' "$*" >&2; }

need_packages() {
  local missing=() package
  if command -v dpkg-query >/dev/null; then
    local installed
    installed=" $(dpkg-query -W -f '${db:Status-Abbrev}${Package} ' 2>/dev/null | sed 's/  */ /g')"
    for package in "$@"; do
      [[ $installed == *" ii $package "* || $installed == "ii $package "* ]] || missing+=("$package")
    done
  else
    missing=("$@")
    # No Debian: whoever installed the same things under other names says so.
    [[ ${TAPWRIGHT_SETUP:-} == done ]] && return
  fi
  ((${#missing[@]} == 0)) && return
  local as_root=()
  if ((EUID != 0)); then as_root=(sudo); fi
  if ! command -v apt-get >/dev/null || { ((EUID != 0)) && ! command -v sudo >/dev/null; }; then
    say "Needs packages that are not installed, and can't install them here" \
        "(apt-get and root or sudo are wanted)."
    say "Install these Debian 12 packages by hand, then start again:"
    say "  ${missing[*]}"
    command -v dpkg-query >/dev/null ||
      say "Where they have other names, install those and start again with TAPWRIGHT_SETUP=done."
    exit 2
  fi
  say "Installing: ${missing[*]}"
  local apt=("${as_root[@]}" env DEBIAN_FRONTEND=noninteractive apt-get -q
             -o Dpkg::Use-Pty=0 -o Acquire::Retries=3)
  local log
  log=$(mktemp)
  if ! { "${apt[@]}" update && "${apt[@]}" install -y --no-install-recommends "${missing[@]}"; } \
      >"$log" 2>&1; then
    tail -n 20 "$log" >&2
    say "Could not install: ${missing[*]}"
    rm -f "$log"
    exit 2
  fi
  rm -f "$log"
}

# Build output is shown only when it fails: what counts is what comes after it.
build() {
  local directory=$1 targets=()
  shift
  while (($# > 0)) && [[ $1 != -- ]]; do
    targets+=("$1")
    shift
  done
  (($# > 0)) && shift
  local options=(-DCMAKE_BUILD_TYPE=Release "$@")
  if command -v ccache >/dev/null; then options+=(-DCMAKE_CXX_COMPILER_LAUNCHER=ccache); fi
  mkdir -p "$directory"
  local log=$directory/build.log
  if ! { cmake -S "$top" -B "$directory" -G Ninja "${options[@]}" &&
         ninja -C "$directory" "${targets[@]}"; } >"$log" 2>&1; then
    tail -n 60 "$log" >&2
    say "The build in $directory failed; the whole output is in $log"
    exit 3
  fi
}
