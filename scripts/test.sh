#!/bin/sh
# Checks everything: style, types, architecture, tests. Needs Python 3.11 or later with
# pip and venv; builds an environment of its own in .venv-test (about 400 MB, kept).
# Extra arguments go to pytest: sh scripts/test.sh -k lattice
set -eu
cd "$(dirname "$0")/.."
. scripts/environment.sh
make_environment .venv-test --group dev
export PYTHONHASHSEED=0

"$bin/ruff" check .
"$bin/ruff" format --check .
"$bin/mypy"
"$bin/lint-imports"
"$bin/python" -m pytest -n 2 "$@"
