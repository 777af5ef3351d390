# Read by install.sh and uninstall.sh: where things lie, and how a step is done or only told.
# shellcheck shell=sh disable=SC2034  # the names are used by those who read this file

root=""
dry=no

set_places() {
    opt=$root/opt/idlerwatch
    etc=$root/etc/idlerwatch
    data=$root/var/lib/idlerwatch
    unit=$root/etc/systemd/system/idlerwatch.service
    rules=$root/etc/udev/rules.d/70-idlerwatch.rules
    modules=$root/etc/modules-load.d/idlerwatch.conf
    mosquitto=$root/etc/mosquitto
}
set_places
taken=1

say() { printf '%s\n' "$*" >&2; }

# The words both scripts know; how many were taken goes to $taken.
common_word() {
    taken=1
    case $1 in
    --dry-run) dry=yes ;;
    --root)
        if [ $# -lt 2 ] || [ ! -d "$2" ]; then
            say "--root is ${2:-missing}, must be a folder that exists"
            exit 2
        fi
        root=$(CDPATH='' cd -- "$2" && pwd)
        [ "$root" != / ] || root=""
        set_places
        taken=2
        ;;
    -h | --help)
        usage "$0"
        exit 0
        ;;
    *)
        say "$1 is no option of $(basename -- "$0")"
        return 1
        ;;
    esac
}

# The comment at the head of a script.
usage() { sed -n '2,/^[^#]/{/^#/s/^# \{0,1\}//p;}' "$1" >&2; }

need_root() {
    if [ -z "$root" ] && [ "$dry" = no ] && [ "$(id -u)" -ne 0 ]; then
        say "must be run as root: sudo sh $0 (or --dry-run to see what it would do)"
        exit 2
    fi
}

run() {
    if [ "$dry" = yes ]; then
        say "would run: $*"
    else
        "$@"
    fi
}

folder() { run install -d -m "$1" "$2"; }

# place MODE FROM TO; nothing is touched where the file is as it should be
place() {
    if [ -e "$3" ] && cmp -s "$2" "$3"; then
        return 0
    fi
    run install -D -m "$1" "$2" "$3"
}

owned_by_service() { [ -n "$root" ] || run chown root:idlerwatch "$@"; }
