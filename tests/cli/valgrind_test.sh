#!/usr/bin/env bash
# valgrind_test.sh PROGRAM COMMAND: the command on a small link, with no invalid read or write, no
# value used before it was set and nothing lost.
set -euo pipefail
program=$1 command=$2
command -v valgrind >/dev/null || { echo "valgrind is not installed"; exit 77; }
folder=$(mktemp -d)
trap 'rm -rf "$folder"' EXIT
cat >"$folder/link.json" <<'JSON'
{"format": "tapwright.link/1",
 "signal": {"symbol_rate_gbd": 10, "span_ui": [2, 6]},
 "channel": {"pulse": {"samples_per_ui": 2,
   "samples_v": [0, 0, 0.01, 0.1, 0.35, 0.6, 0.5, 0.3, 0.2, 0.12, 0.08, 0.05, 0.03, 0.02, 0.01, 0]}},
 "transmitter": {"swing_mvppd": 800,
   "fir": [{"position": -1, "min": -0.2, "max": 0, "step": 0.1}, {"position": 0, "rule": "remainder"}]},
 "receiver": {"dfe": [{"max_mv": 40, "step_mv": 4}], "noise": {"rms_mv": 1}}}
JSON
arguments=("$folder/link.json" --quiet)
case $command in
  example | schema) arguments=() ;;
  solve) arguments+=(--threads 2 --json "$folder/out.json") ;;
  pulse) arguments+=(--csv "$folder/out.csv") ;;
esac
code=0
valgrind --quiet --error-exitcode=99 --leak-check=full --errors-for-leak-kinds=definite,indirect \
  "$program" "$command" "${arguments[@]}" >"$folder/stdout" 2>"$folder/stderr" || code=$?
# 1 = the target was missed; 2 = a command that takes no link file and has said so.
if ((code > 2)); then
  cat "$folder/stderr"
  echo "ended with $code"
  exit 1
fi
