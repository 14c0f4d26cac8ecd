#!/usr/bin/env bash
# Make the environment, run the main job (or the one named), compare, and say which files there are.
set -euo pipefail
source "$(dirname "$0")/environment.sh" ""
job="${1:-configs/z90.toml}"
name="$(basename "$job" .toml)"
mkdir -p results
"$python" -m shaper optimize "$job" --output "results/$name.h5" --figure "results/$name-search.png"
"$python" -m shaper compare "results/$name.h5" --figure "results/$name.png"
echo
echo "results/$name.h5  results/$name.png  results/$name-search.png"
