#!/usr/bin/env bash
# The same batch on a cluster that runs a Dask scheduler, or on one started here for the purpose:
#   scripts/examples/cluster_run.sh TEMPLATE.toml RESULTS TRACE...
#
#   SCHEDULER   address of a running scheduler, such as tcp://node-1:8786; unset, one is started on this machine
#   WORKERS     how many workers are then started, 2
#
# Every machine needs the same version of spinfit and sees the traces and RESULTS under the same paths.
set -euo pipefail
template=${1:?a template} results=${2:?a folder for the results}
shift 2
spinfit=${SPINFIT:-spinfit} python=${PYTHON:-python3}

if [ -z "${SCHEDULER:-}" ]; then
    scratch=$(mktemp -d)
    started=()
    finish() {
        kill "${started[@]}" 2>/dev/null || true
        wait
        rm -rf "$scratch"
    }
    trap finish EXIT
    "$python" -m distributed.cli.dask_scheduler --host 127.0.0.1 --port 0 --no-dashboard \
        --scheduler-file "$scratch/scheduler.json" >"$scratch/log" 2>&1 &
    started+=($!)
    for _ in $(seq "${WORKERS:-2}"); do
        # One thread each: fits do not share a process.
        "$python" -m distributed.cli.dask_worker --scheduler-file "$scratch/scheduler.json" --nthreads 1 \
            --no-dashboard --local-directory "$scratch" >>"$scratch/log" 2>&1 &
        started+=($!)
    done
    SCHEDULER=$("$python" - "$scratch/scheduler.json" "${WORKERS:-2}" <<'PYTHON'
import sys

from distributed import Client

with Client(scheduler_file=sys.argv[1], timeout=60) as client:
    client.wait_for_workers(int(sys.argv[2]), timeout=60)
    print(client.scheduler.address)
PYTHON
    )
fi
code=0
"$spinfit" batch --template "$template" "$@" --out "$results" --cluster "$SCHEDULER" || code=$?
exit "$code"
