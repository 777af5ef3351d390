#!/bin/sh
# Installs idlerwatch as a service on a Debian-like board. Run it again for an update: settings, secrets and data stay.
#
#   sudo sh deploy/install.sh              the service; the broker is another machine (better, see deploy/README.md)
#   sudo sh deploy/install.sh --broker     this board is the broker as well
#   sh deploy/install.sh --dry-run         only says what it would do
#
#   --root DIR       put the files below DIR; no user, no packages, no services (for images and tests)
#   --files-only     leave the program (/opt/idlerwatch/venv) as it is
set -eu

here=$(CDPATH='' cd -- "$(dirname -- "$0")" && pwd)
# shellcheck source=deploy/places.sh
. "$here/places.sh"

broker=no
program=yes
while [ $# -gt 0 ]; do
    taken=1
    case $1 in
    --broker) broker=yes ;;
    --files-only) program=no ;;
    *) common_word "$@" || { usage "$0"; exit 2; } ;;
    esac
    shift "$taken"
done

# Packages of the distribution. A 32-bit board takes its numpy from there: the registry has no wheel for it.
install_packages() {
    packages=""
    python3 -c 'import ensurepip, venv' >/dev/null 2>&1 || packages="$packages python3-venv"
    [ "$broker" = no ] || command -v mosquitto_passwd >/dev/null 2>&1 || packages="$packages mosquitto"
    if is_32_bit && ! python3 -c 'import numpy' >/dev/null 2>&1; then
        packages="$packages python3-numpy"
    fi
    if [ -n "$packages" ]; then
        run apt-get update -qq
        # shellcheck disable=SC2086  # the names are words
        run apt-get install -y --no-install-recommends $packages
    fi
}

is_32_bit() { python3 -c 'import sys; sys.exit(sys.maxsize > 2**32)' >/dev/null 2>&1; }

make_user() {
    if ! getent passwd idlerwatch >/dev/null 2>&1; then
        run useradd --system --user-group --home-dir /var/lib/idlerwatch --no-create-home \
            --shell /usr/sbin/nologin --groups dialout idlerwatch
    fi
}

install_program() {
    if [ ! -x "$opt/venv/bin/python" ]; then
        if is_32_bit; then
            run python3 -m venv --system-site-packages "$opt/venv"
        else
            run python3 -m venv "$opt/venv"
        fi
    fi
    run "$opt/venv/bin/python" -m pip install --disable-pip-version-check --quiet --upgrade "$here/.."
    run mkdir -p "$root/usr/local/bin"
    run ln -sfn /opt/idlerwatch/venv/bin/idlerwatch "$root/usr/local/bin/idlerwatch"
}

# Example settings and empty secrets, where there are none yet.
install_settings() {
    folder 0750 "$etc"
    folder 0750 "$etc/meters"
    if [ -e "$etc/idlerwatch.toml" ]; then
        say "kept: $etc/idlerwatch.toml"
    else
        place 0640 "$here/../config/example.toml" "$etc/idlerwatch.toml"
    fi
    for secret in mqtt-password influx-token; do
        [ -e "$etc/$secret" ] || place 0640 /dev/null "$etc/$secret"
    done
    owned_by_service "$etc" "$etc/meters" "$etc/idlerwatch.toml" "$etc/mqtt-password" "$etc/influx-token"
}

install_system_files() {
    place 0644 "$here/idlerwatch.service" "$unit"
    place 0644 "$here/70-idlerwatch.rules" "$rules"
    place 0644 "$here/modules-load.conf" "$modules"
    folder 0755 "$opt/share"
    for file in README.md wiring.svg; do
        place 0644 "$here/$file" "$opt/share/$file"
    done
}

# Settings of the broker, and a password for the converter and for phones, where there are none yet.
install_broker() {
    place 0644 "$here/mosquitto/idlerwatch.conf" "$mosquitto/conf.d/idlerwatch.conf"
    [ -e "$mosquitto/idlerwatch.acl" ] || place 0640 "$here/mosquitto/idlerwatch.acl" "$mosquitto/idlerwatch.acl"
    if [ -e "$mosquitto/idlerwatch.passwd" ]; then
        say "kept: $mosquitto/idlerwatch.passwd"
    elif [ "$dry" = yes ]; then
        say "would make passwords for the converter and for phones in $mosquitto/idlerwatch.passwd"
    else
        make_passwords
    fi
    for file in "$mosquitto/idlerwatch.acl" "$mosquitto/idlerwatch.passwd"; do
        [ -n "$root" ] || run chown root:mosquitto "$file"
    done
}

make_passwords() {
    converter=$(sed -n 's/^converter *= *"\([a-z0-9-]*\)".*/\1/p' "$etc/idlerwatch.toml" | head -n 1)
    if [ -z "$converter" ]; then
        say "$etc/idlerwatch.toml names no converter, must have [site] converter = \"...\""
        exit 2
    fi
    (
        umask 027
        random_word >"$etc/mqtt-password"
        random_word >"$etc/phone-password"
        printf '%s:%s\nphone:%s\n' "$converter" "$(cat "$etc/mqtt-password")" "$(cat "$etc/phone-password")" \
            >"$mosquitto/idlerwatch.passwd"
    )
    chmod 0600 "$etc/phone-password"
    mosquitto_passwd -U "$mosquitto/idlerwatch.passwd"
    say "passwords made: user $converter (in $etc/mqtt-password), user phone (in $etc/phone-password)
the settings need: [mqtt] username = \"$converter\", password_file = \"/etc/idlerwatch/mqtt-password\""
}

random_word() { od -An -N12 -tx1 /dev/urandom | tr -d ' \n'; }

start_services() {
    run systemctl daemon-reload
    run systemctl restart systemd-modules-load.service
    run udevadm control --reload
    run udevadm trigger --subsystem-match=tty
    [ "$broker" = no ] || run systemctl restart mosquitto.service
    run systemctl enable idlerwatch.service
    # an update goes on with the new program; the first installation waits for settings
    run systemctl try-restart idlerwatch.service
}

if ! python3 -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
    say "python3 is $(python3 -V 2>&1 || echo missing), must be 3.11 or later (Debian 12 has it)"
    exit 2
fi
need_root

[ -n "$root" ] || install_packages
[ -n "$root" ] || make_user
[ "$program" = no ] || install_program
install_settings
install_system_files
[ "$broker" = no ] || install_broker
[ -n "$root" ] || start_services

if [ "$dry" = no ]; then
    say "
Next:
  1. edit $etc/idlerwatch.toml
  2. idlerwatch check --settings $etc/idlerwatch.toml
  3. systemctl start idlerwatch; journalctl -fu idlerwatch"
fi
