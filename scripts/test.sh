#!/usr/bin/env bash
# Make the environment, check the style, run all tests. Arguments go to pytest.
set -euo pipefail
source "$(dirname "$0")/environment.sh" "test"

# The page tests need a browser: installed where this may be done, else pytest says loudly that they did not run.
if ! command -v chromedriver >/dev/null && [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null; then
  (apt-get update -qq && apt-get install -y -qq --no-install-recommends chromium chromium-driver) >/dev/null 2>&1 \
    || echo "test.sh: the browser could not be installed" >&2
fi
if [ ! -d tests/page/node_modules ] && command -v npm >/dev/null; then
  npm ci --silent --no-audit --no-fund --prefix tests/page >/dev/null 2>&1 \
    || echo "test.sh: the accessibility checker could not be installed" >&2
fi

"$python" -m ruff check .
"$python" -m ruff format --check .
exec "$python" -m pytest -q -n auto --dist loadfile "$@"
