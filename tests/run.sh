#!/bin/sh
# Sets up the environment, then the linter, the format, the types, the import contracts and the whole test suite.
#
#   sh tests/run.sh                    everything
#   sh tests/run.sh -k leg -x          words go on to pytest
#
# All steps run, whatever fails; the last line on stdout is pytest's summary. Exit 1 where a step failed.
set -eu

here=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd)
# shellcheck source=deploy/environment.sh
. "$here/deploy/environment.sh"

prepare_environment "$here" "test"
cd "$here"
PATH=$environment/bin:$PATH:/usr/local/sbin:/usr/sbin
export PATH

failed=""
step() {
    printf '== %s\n' "$*"
    "$@" || failed="$failed '$*'"
}

step ruff check .
step ruff format --check .
step mypy
step lint-imports
step python -m pytest "$@"

if [ -n "$failed" ]; then
    say "failed:$failed"
    exit 1
fi
