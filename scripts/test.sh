#!/usr/bin/env bash
# Make the environment, check the style, run all tests. Arguments go to pytest.
set -euo pipefail
source "$(dirname "$0")/environment.sh" "test"

# The report is tested in a real browser. Where none can be had, say so here and in the summary.
if ! command -v chromedriver >/dev/null && [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null; then
  { apt-get update -qq && DEBIAN_FRONTEND=noninteractive apt-get install -y -qq \
    --no-install-recommends chromium chromium-driver; } >/dev/null 2>&1 || true
fi
command -v chromedriver >/dev/null ||
  echo "test.sh: NO BROWSER: the page tests will not run (Debian: chromium, chromium-driver)" >&2
if [ ! -e tests/page/node_modules/axe-core/axe.min.js ]; then
  (cd tests/page && npm ci --silent --no-audit --no-fund) >/dev/null 2>&1 ||
    echo "test.sh: NO AXE-CORE: the accessibility tests will not run (npm ci in tests/page)" >&2
fi

"$python" -m ruff check .
"$python" -m ruff format --check .
exec "$python" -m pytest -q "$@"
