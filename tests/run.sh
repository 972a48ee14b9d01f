#!/bin/sh
# Makes .venv, installs leadline with the test extra, and runs the tests. Arguments go to pytest.
set -eu
cd "$(dirname "$0")/.."
[ -x .venv/bin/python ] || "${PYTHON:-python3}" -m venv .venv
.venv/bin/python -m pip install --quiet --disable-pip-version-check -e ".[test]"
# One linear-algebra thread: the tests compare numbers, and threads would only fight.
export OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 MKL_NUM_THREADS=1
[ $# -eq 0 ] || exec .venv/bin/python -m pytest "$@"
# Everything, in two halves side by side: most of the statistical tests, and the rest.
apart=tests/statistical/test_false_alarms.py
second=$(mktemp)
trap 'rm -f "$second"' EXIT
.venv/bin/python -m pytest -p no:cacheprovider tests/statistical --ignore="$apart" >"$second" 2>&1 &
other=$!
status=0
.venv/bin/python -m pytest -p no:cacheprovider tests --ignore=tests/statistical || status=$?
.venv/bin/python -m pytest -p no:cacheprovider "$apart" || status=$?
wait "$other" || status=$?
cat "$second"
exit "$status"
