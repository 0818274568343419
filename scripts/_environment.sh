# Sourced by the other scripts: sets `root` and `environment`, finds a Python and sets the environment up.
#
#   SPINFIT_ENV   folder of the virtual environment; the default is .venv in the project's root
#   PYTHON        the Python to make it with; the default is the first of the usual names that is 3.11 or later

CDPATH='' root=$(cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.." && pwd -P)
environment=${SPINFIT_ENV:-"$root/.venv"}
case $environment in /*) ;; *) environment="$PWD/$environment" ;; esac

# These would send the environment's Python to somebody else's modules.
unset PYTHONPATH PYTHONHOME

# Two BLAS threads on small matrices are slower than one, and figures wander less with one.
export OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 MKL_NUM_THREADS=1
# Pictures are drawn into files, on machines without a screen too.
export MPLBACKEND=Agg

recent_enough() {
    "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' </dev/null >/dev/null 2>&1
}

find_python() {
    local candidate
    if [ -n "${PYTHON:-}" ]; then
        if recent_enough "$PYTHON"; then printf '%s\n' "$PYTHON"; return 0; fi
        printf 'PYTHON=%s is not a Python of version 3.11 or later; name one, or unset PYTHON\n' "$PYTHON" >&2
        return 1
    fi
    for candidate in python3 python3.14 python3.13 python3.12 python3.11 python; do
        if recent_enough "$candidate"; then printf '%s\n' "$candidate"; return 0; fi
    done
    printf 'no Python of version 3.11 or later was found: install one, or name it: PYTHON=/path/to/python3 %s\n' "$0" >&2
    return 1
}

prepare_environment() {
    local python
    python=$(find_python) || return 1
    "$python" "$root/scripts/_environment.py" "$root" "$environment"
}
