#!/bin/sh
# Takes idlerwatch off the board again. Settings, secrets and recorded data stay unless told otherwise.
#
#   sudo sh deploy/uninstall.sh            the service and the program
#   sudo sh deploy/uninstall.sh --purge    settings, secrets, recorded data and the user as well
#   sh deploy/uninstall.sh --dry-run       only says what it would do
#
#   --root DIR       the files lie below DIR (for images and tests)
set -eu

here=$(CDPATH='' cd -- "$(dirname -- "$0")" && pwd)
# shellcheck source=deploy/places.sh
. "$here/places.sh"

purge=no
while [ $# -gt 0 ]; do
    taken=1
    case $1 in
    --purge) purge=yes ;;
    *) common_word "$@" || { usage "$0"; exit 2; } ;;
    esac
    shift "$taken"
done

need_root

[ -n "$root" ] || [ ! -e "$unit" ] || run systemctl disable --now idlerwatch.service
run rm -f "$unit" "$rules" "$modules" "$root/usr/local/bin/idlerwatch"
run rm -rf "$opt"
run rm -f "$mosquitto/conf.d/idlerwatch.conf"
[ -n "$root" ] || run systemctl daemon-reload

if [ "$purge" = yes ]; then
    run rm -rf "$etc" "$data" "$unit.d"
    run rm -f "$mosquitto/idlerwatch.passwd" "$mosquitto/idlerwatch.acl"
    if [ -z "$root" ] && getent passwd idlerwatch >/dev/null 2>&1; then
        run userdel idlerwatch
    fi
else
    say "left: $etc (settings, secrets), $data (recorded data); --purge takes them away"
fi
