#!/bin/sh
# Renews both locks from pyproject.toml. Needs uv on the PATH; writes no addresses.
set -eu
cd "$(dirname "$0")/.."
common="--universal --generate-hashes --no-header --no-annotate --fork-strategy fewest --python-version 3.11 -q"
uv pip compile pyproject.toml --all-extras $common -o .lock/test.txt
uv pip compile pyproject.toml --extra build -c .lock/test.txt $common -o .lock/run.txt
