#!/bin/sh
# Runs every check, from a fresh clone and from any folder: sh tests/run.sh [ARGUMENTS FOR PYTEST]
# Sets up .venv in this repository the first time; then ruff, mypy and pytest. Stops at the first that finds a fault.
set -eu

root=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd -P)
sh "$root/deploy/set-up.sh" test
cd -- "$root"
# Tests start programs that the environment brings, such as `strandline` itself.
PATH=$root/.venv/bin:$PATH
export PATH

echo "ruff" >&2
python -m ruff check .
echo "mypy" >&2
python -m mypy
echo "pytest" >&2
# Two processes, a file of tests in one of them: many tests wait for real processes. `-n 0` runs all in one.
exec python -m pytest -n 2 --dist loadfile "$@"
