#!/bin/sh
# Sets up .venv once, simulates a ready system, holds it against its exact equilibrium and draws it. Safe to repeat.
set -eu
cd "$(dirname "$0")/.."
ready=.venv/.driblet-installed
if [ ! -e "$ready" ] || [ pyproject.toml -nt "$ready" ]; then
  echo "setting up .venv (about a minute, once)"
  "${PYTHON:-python3}" -c 'import sys; sys.exit("driblet needs Python 3.11, 3.12 or 3.13; set PYTHON=...") if not (3, 11) <= sys.version_info[:2] < (3, 14) else None'
  "${PYTHON:-python3}" -m venv .venv
  .venv/bin/python -m pip install --quiet --disable-pip-version-check -e .
  touch "$ready"
fi
mkdir -p out
.venv/bin/driblet run configs/uphill_transfer.toml -o out/uphill_transfer.h5 --resume
.venv/bin/driblet check out/uphill_transfer.h5
.venv/bin/driblet plot out/uphill_transfer.h5 -o out/uphill_transfer.png
