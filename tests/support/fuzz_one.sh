#!/usr/bin/env bash
# fuzz_one.sh SECONDS FOLDER PROGRAM SEEDS...: runs one fuzz program; leaves its talk in FOLDER/log
# and "clean" or "found" with the number of executions in FOLDER/result.
seconds=$1 folder=$2 program=$3
shift 3
result=found
if "$program" -max_total_time="$seconds" -timeout=10 -rss_limit_mb=2048 -max_len=20000 \
  -print_final_stats=1 -artifact_prefix="$folder/" "$@" >"$folder/log" 2>&1; then
  result=clean
fi
executions=$(sed -n 's/^stat::number_of_executed_units: *//p' "$folder/log")
echo "$result ${executions:-0}" >"$folder/result"
