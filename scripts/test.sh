#!/usr/bin/env bash
# Make the environment, check the style, run all tests. Arguments go to pytest.
set -euo pipefail
source "$(dirname "$0")/environment.sh" "test"
"$python" -m ruff check .
"$python" -m ruff format --check .
exec "$python" -m pytest -q "$@"
