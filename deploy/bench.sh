#!/usr/bin/env bash
# Runs every measurement in tests/bench in turn and says which could not be taken. Nothing here is a timed test.
set -Eeuo pipefail
cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.."
# shellcheck source=deploy/venv.sh
. deploy/venv.sh

prepare_venv 'postgres,test'
shopt -s nullglob
failed=()
for script in tests/bench/*.py; do
  say "$script ($SECONDS s)"
  .venv/bin/python "$script" "$@" || failed+=("$script")
done
if [ "${#failed[@]}" -gt 0 ]; then
  printf '== FAILED: %s\n' "${failed[*]}" >&2
  exit 1
fi
say "all measured after $SECONDS s"
