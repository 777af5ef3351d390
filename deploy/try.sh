#!/bin/sh
# Sets up a virtual environment in this clone and runs the demonstration: the daemon itself, watching a virtual
# converter through a bad day. Needs Python 3.11 or later with pip; nothing is installed outside the environment.
#
#   sh deploy/try.sh               until Ctrl-C
#   sh deploy/try.sh --for 60      a minute; every word goes on to `idlerwatch demo`
#
# IDLERWATCH_VENV names another folder for the environment, PYTHON another interpreter.
set -eu

here=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd)
# shellcheck source=deploy/environment.sh
. "$here/deploy/environment.sh"

# mosquitto stands in /usr/sbin, which is often not on the path of a plain user
PATH=$PATH:/usr/local/sbin:/usr/sbin
export PATH
if command -v mosquitto >/dev/null 2>&1; then
    prepare_environment "$here" ""
else
    prepare_environment "$here" "broker"
fi

exec "$environment/bin/idlerwatch" demo "$@"
