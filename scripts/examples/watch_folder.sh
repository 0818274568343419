#!/usr/bin/env bash
# Fit every trace that appears in a folder, as it appears:
#   scripts/examples/watch_folder.sh TEMPLATE.toml FOLDER RESULTS [SECONDS between looks, 30] [LOOKS, endless]
#
# The same batch is run again and again: what is fitted stays as it is, and only new or changed traces are fitted.
# A trace that is still being written fails at first, and is fitted once its content has changed.
set -uo pipefail
template=${1:?a template} folder=${2:?a folder with traces} results=${3:?a folder for the results}
every=${4:-30} looks=${5:-}
spinfit=${SPINFIT:-spinfit}

shopt -s nullglob
while [ -z "$looks" ] || [ "$looks" -gt 0 ]; do
    traces=("$folder"/*.csv)
    if [ "${#traces[@]}" -gt 0 ]; then
        "$spinfit" batch --template "$template" "${traces[@]}" --out "$results" --quiet
        code=$?
        # 1: some traces are not good, which the table says; anything above is for a person to look at.
        if [ "$code" -gt 1 ]; then exit "$code"; fi
    fi
    looks=${looks:+$((looks - 1))}
    if [ -z "$looks" ] || [ "$looks" -gt 0 ]; then sleep "$every"; fi
done
