#!/bin/sh
# Makes .venv, installs leadline with the test extra, and runs the tests. Arguments go to pytest.
set -eu
cd "$(dirname "$0")/.."
[ -x .venv/bin/python ] || "${PYTHON:-python3}" -m venv .venv
.venv/bin/python -m pip install --quiet --disable-pip-version-check -e ".[test]"
# One linear-algebra thread: the tests compare numbers, and threads would only fight.
export OMP_NUM_THREADS=1 OPENBLAS_NUM_THREADS=1 MKL_NUM_THREADS=1
# Two processes that take work from each other: the long tests are few.
exec .venv/bin/python -m pytest -n 2 --dist worksteal "$@"
