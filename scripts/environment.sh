# Sourced by run.sh and test.sh: makes .venv beside the project and installs it there.
# usage: source environment.sh EXTRA   (EXTRA may be empty)
root="$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd)"
cd "$root"
for candidate in python3.13 python3.12 python3.11 python3 python; do
  if command -v "$candidate" >/dev/null && "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
    base="$candidate"
    break
  fi
done
: "${base:?expected Python 3.11 or newer on the PATH, found none}"
[ -x .venv/bin/python ] || "$base" -m venv .venv
python="$root/.venv/bin/python"
wanted=".${1:+[$1]}"
stamp=".venv/installed-$( (cat pyproject.toml; echo "$wanted") | cksum | tr ' ' '-')"
if [ ! -e "$stamp" ]; then
  "$python" -m pip install --quiet --disable-pip-version-check --editable "$wanted"
  touch "$stamp"
fi
