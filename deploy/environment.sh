# Read by try.sh and tests/run.sh: finds a Python and keeps a virtual environment that fits the clone.
# shellcheck shell=sh

say() { printf '%s\n' "$*" >&2; }

# The first interpreter that is recent enough and can make virtual environments; a sentence and exit 2 where none is.
find_python() {
    for candidate in ${PYTHON:+"$PYTHON"} python3 python3.14 python3.13 python3.12 python3.11 python; do
        if "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
            if "$candidate" -c 'import ensurepip, venv' >/dev/null 2>&1; then
                printf '%s\n' "$candidate"
                return 0
            fi
            without_venv=$candidate
        fi
    done
    if [ -n "${without_venv:-}" ]; then
        say "$without_venv cannot make a virtual environment; on Debian: sudo apt install python3-venv"
    else
        say "No Python 3.11 or later found (python3 is $(python3 -V 2>&1 || echo missing)); install one, or name it: PYTHON=/path/to/python3.11 sh $0"
    fi
    exit 2
}

# Removes a half-made environment, and nothing that is not one.
clear_environment() {
    if [ -f "$environment/pyvenv.cfg" ]; then
        rm -rf -- "$environment"
    elif [ -e "$environment" ] && [ -n "$(ls -A "$environment" 2>/dev/null)" ]; then
        say "$environment is no virtual environment, must be one, empty or absent; IDLERWATCH_VENV names another folder"
        exit 2
    fi
}

# prepare_environment CLONE EXTRA: afterwards $environment holds the package of the clone, installed editable with that
# extra ("" for none). Nothing is done where pyproject.toml and the clone's place are what they were the last time.
prepare_environment() {
    environment=${IDLERWATCH_VENV:-$1/.venv}
    stamp=$environment/idlerwatch-${2:-plain}.stamp
    wanted="$1 $(cksum <"$1/pyproject.toml")"
    if [ -x "$environment/bin/idlerwatch" ] && [ "$(cat "$stamp" 2>/dev/null)" = "$wanted" ]; then
        return 0
    fi
    if ! "$environment/bin/python" -c 'import pip' >/dev/null 2>&1; then
        interpreter=$(find_python)
        say "Making a virtual environment in $environment with $("$interpreter" -V)"
        clear_environment
        "$interpreter" -m venv -- "$environment"
    fi
    say "Installing idlerwatch into it (a minute or two the first time, seconds afterwards)"
    install_log=$environment/install.log
    if ! "$environment/bin/python" -m pip install --disable-pip-version-check --quiet --editable \
        "$1${2:+[$2]}" >"$install_log" 2>&1; then
        cat -- "$install_log" >&2
        say "pip could not install idlerwatch: see the lines above (is there a network?)"
        exit 1
    fi
    printf '%s\n' "$wanted" >"$stamp"
}
