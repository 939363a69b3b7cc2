#!/usr/bin/env bash
# The quickest way to see it work: installs into .venv, runs the invented yard, and leaves its mails and pictures.
set -Eeuo pipefail
out=${1:-}
case "$out" in
  '' | /*) ;;
  *) out=$PWD/$out ;;
esac
cd -- "$(dirname -- "${BASH_SOURCE[0]}")/.."
# shellcheck source=deploy/venv.sh
. deploy/venv.sh

out=${out:-trial-out}
prepare_venv 'trial,holidays'
say "running the trial into $out"
.venv/bin/gapbell trial --out "$out"
say "done after $SECONDS s"
