#!/usr/bin/env bash
# A temperature series in one go: fit, list, draw g against temperature.
#   scripts/examples/temperature_series.sh TEMPLATE.toml SERIES.csv PARAMETER RESULTS
#
# SERIES.csv has a row a trace: its file, and its temperature under the heading temperature_K.
#   file,temperature_K,sample
#   traces/tile-04k.csv,4.2,tile 3
#   traces/tile-77k.csv,77,tile 3
set -uo pipefail
template=${1:?a template} series=${2:?a table of the series} parameter=${3:?a parameter, such as cu.g_z}
results=${4:?a folder for the results}
spinfit=${SPINFIT:-spinfit}

"$spinfit" batch --template "$template" --values "$series" --out "$results" --time-limit "300 s"
code=$?
if [ "$code" -gt 1 ]; then exit "$code"; fi
"$spinfit" summary "$results" --sort temperature --where "status = good" \
    --columns "temperature,$parameter,chi2_reduced,outlier" \
    --plot "$results/$parameter.png" --x temperature --y "$parameter"
if [ "$code" -eq 1 ]; then
    printf '\nnot good:\n'
    "$spinfit" summary "$results" --where "status != good" --columns status,reason
fi
exit "$code"
