#!/bin/sh
# Makes .venv, installs leadline into it, and runs the main job on two invented spectra.
set -eu
cd "$(dirname "$0")/.."
[ -x .venv/bin/python ] || "${PYTHON:-python3}" -m venv .venv
.venv/bin/python -m pip install --quiet --disable-pip-version-check -e .
for name in with_band look_alike; do
    echo
    echo "== leadline check demo/$name.csv =="
    .venv/bin/leadline check "demo/$name.csv" --system demo/system.toml --out "demo/out/$name" --force
    echo "Figure: demo/out/$name/figure.png"
done
