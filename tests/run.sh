#!/usr/bin/env bash
# Installs what is missing and runs all tests, some thirteen minutes; with "quick" two of them.
# Further words go to pytest. The whole suite, run without further words, writes VALIDATION.md.
set -euo pipefail
cd "$(dirname "$0")/.."
bash .ci/setup
select=()
if [ "${1:-}" = quick ]; then
    shift
    select=(-m "not full and not slow")
    # Checks against the outside take half a minute; they guard models, which seldom change.
    for folder in analytic crosscheck kit properties published; do
        select+=(--ignore "tests/$folder")
    done
elif [ $# -eq 0 ]; then
    select=(--validation tests/VALIDATION.md)
fi
.venv/bin/ruff check --quiet .
.venv/bin/ruff format --quiet --check .
.venv/bin/mypy
# Two test processes whose linear algebra starts threads of its own wait for one another.
export OPENBLAS_NUM_THREADS=1 OMP_NUM_THREADS=1
exec .venv/bin/python -m pytest -n 2 --dist loadfile --no-loadscope-reorder "${select[@]}" "$@"
