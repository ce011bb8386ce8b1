#!/bin/sh
# Prints the path of a Python that the project can use, or says in one sentence how to get one and exits with 2.
#
# A candidate counts only if it really runs: a version manager's stub may stand on the PATH and fail. It must be a
# released CPython >= 3.12 with the global lock (wheels exist for it) and able to make virtual environments.
# Order: PATH before pyenv's installed versions; versions that requirements.lock was tried with before newer ones; newest first.
# PYTHON=/path/to/python takes that one and no other.
set -u

tried_with_lock='3.12 3.13'

# One line "version path" if the candidate is usable, else nothing.
probe() {
    version=$("$1" -c '
import sys, sysconfig
import ensurepip, venv
usable = (
    sys.version_info >= (3, 12)
    and sys.version_info.releaselevel == "final"
    and sys.implementation.name == "cpython"
    and not sysconfig.get_config_var("Py_GIL_DISABLED")
)
print("%d.%d.%d" % sys.version_info[:3] if usable else "")
' </dev/null 2>/dev/null) || return 0
    case $version in
        [0-9]*) printf '%s %s\n' "$version" "$1" ;;
    esac
}

on_path() {
    rest=${PATH-}:
    while [ -n "$rest" ]; do
        folder=${rest%%:*}
        rest=${rest#*:}
        for name in python3.14 python3.13 python3.12 python3 python; do
            [ -x "${folder:-.}/$name" ] && [ ! -d "${folder:-.}/$name" ] && probe "${folder:-.}/$name"
        done
    done
}

in_pyenv() {
    for candidate in "${PYENV_ROOT:-${HOME:-}/.pyenv}"/versions/*/bin/python; do
        [ -x "$candidate" ] && probe "$candidate"
    done
}

# Newest first; among equal versions the earlier on the PATH (sort -s keeps the order).
newest_first() { sort -s -t. -k1,1nr -k2,2nr -k3,3nr; }

# Reads "version path" lines; the first whose version the lock was tried with (`covered`) or any (`any`).
first() {
    while read -r version path; do
        if [ "$1" = any ]; then
            printf '%s\n' "$path"
            return 0
        fi
        for series in $tried_with_lock; do
            case $version in
                "$series".*) printf '%s\n' "$path"; return 0 ;;
            esac
        done
    done
    return 1
}

if [ -n "${PYTHON:-}" ]; then
    found=$(probe "$PYTHON")
    if [ -n "$found" ]; then
        printf '%s\n' "${found#* }"
        exit 0
    fi
    echo "PYTHON=$PYTHON is no Python 3.12 or newer that runs and has the modules venv and ensurepip; leave PYTHON out to search for one." >&2
    exit 2
fi

path_list=$(on_path | newest_first)
printf '%s\n' "$path_list" | first covered && exit 0
pyenv_list=$(in_pyenv | newest_first)
printf '%s\n' "$pyenv_list" | first covered && exit 0
printf '%s\n' "$path_list" "$pyenv_list" | grep . | first any && exit 0

echo "bayesrange needs Python 3.12 or newer (with venv and ensurepip) and found none on the PATH or in pyenv: install one, for example with 'pyenv install 3.13', 'apt install python3.13-venv', 'brew install python@3.13' or from python.org, then run the command again." >&2
exit 2
