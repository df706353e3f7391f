#!/usr/bin/env bash
# Installs what is missing and runs the main job: a transistor-level netlist to its fidelity.
set -euo pipefail
cd "$(dirname "$0")/.."
bash .ci/setup
exec .venv/bin/python -m cosim run examples/x90_spin.toml --archive x90.h5 --plot x90.png
