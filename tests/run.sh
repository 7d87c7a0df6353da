#!/bin/sh
# Runs every test: ruff, then pytest on two workers and mypy beside it. Makes .venv first where that is needed.
# Arguments go to pytest:  sh tests/run.sh -k garch
set -eu
cd "$(dirname "$0")/.."
sh tests/venv.sh test
unset PYTHONDONTWRITEBYTECODE  # or each of the many processes compiles the package for itself
export OPENBLAS_NUM_THREADS=1  # as the command does: threads of two workers would wait for each other's processors

failed=0
.venv/bin/ruff check . || failed=1
(types=0; said=$(nice .venv/bin/mypy 2>&1) || types=1; printf '\nmypy: %s\n' "$said"; exit $types) &
types=$!  # what it says stands among the dots of pytest, whose line comes last
.venv/bin/python -m pytest -n 2 --dist worksteal "$@" || failed=1
if ! wait $types; then
    failed=1
    echo "mypy has found faults: they are told above" >&2
fi
exit $failed
