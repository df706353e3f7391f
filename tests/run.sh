#!/usr/bin/env bash
# Installs what is missing and runs all tests; with "quick" the part that takes under two minutes.
# Further words go to pytest.
set -euo pipefail
cd "$(dirname "$0")/.."
bash .ci/setup
select=()
if [ "${1:-}" = quick ]; then
    shift
    select=(-m "not full and not slow")
fi
.venv/bin/ruff check --quiet .
.venv/bin/ruff format --quiet --check .
.venv/bin/mypy
exec .venv/bin/python -m pytest -n 2 --dist loadfile "${select[@]}" "$@"
