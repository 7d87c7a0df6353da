#!/bin/sh
# Makes .venv with this checkout installed:  sh tests/venv.sh [EXTRA]
# Does nothing when that was done before and pyproject.toml is still the same.
set -eu
cd "$(dirname "$0")/.."
extra=${1-}
stamp=.venv/installed-${extra:-core}.toml
if cmp -s pyproject.toml "$stamp"; then exit 0; fi

for python in python3 python3.14 python3.13 python3.12 python3.11 python none; do
    if [ "$python" = none ]; then
        echo "Python 3.11 or later is needed, and none was found on the PATH." >&2
        exit 2
    fi
    if "$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then break; fi
done

echo "Installing into .venv${extra:+ with the extra \"$extra\"} ..." >&2
if [ ! -x .venv/bin/python ]; then "$python" -m venv .venv; fi
.venv/bin/python -m pip install --quiet --disable-pip-version-check --no-compile -e ".${extra:+[$extra]}"
# pip compiles on one processor, and tests of others and tools that are never imported too, in three times as long
.venv/bin/python -m compileall -qq -j 0 -x '/(tests|pip|setuptools|pkg_resources|mypyc?|moto|pygments)/' \
    .venv/lib/python3*/site-packages || :  # what does not compile is told by whoever imports it
cp pyproject.toml "$stamp"
