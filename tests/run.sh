#!/bin/sh
# Runs every test: ruff, mypy, then pytest on two workers. Makes .venv first where that is needed.
# Arguments go to pytest:  sh tests/run.sh -k garch
set -eu
cd "$(dirname "$0")/.."
sh tests/venv.sh test
unset PYTHONDONTWRITEBYTECODE  # or each of the many processes compiles the package for itself
export OPENBLAS_NUM_THREADS=1  # as the command does: threads of two workers would wait for each other's processors

failed=0
.venv/bin/ruff check . || failed=1
.venv/bin/mypy || failed=1
.venv/bin/python -m pytest -n 2 --dist worksteal "$@" || failed=1
exit $failed
