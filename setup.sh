#!/bin/sh
# Make the virtual environment from a lock file: quietly, once, again only when a lock or pyproject.toml changed.
#
#   setup.sh run    what the program needs
#   setup.sh dev    that and what tests, lint and types need
#
# PYTHON names the interpreter, VENV the folder. Nothing outside that folder is written.
set -u
cd "$(dirname "$0")" || exit 1

want=${1:-run}
venv=${VENV:-.venv}
log=$venv/set-up.log
ours=$venv/made-by-make           # only a folder that holds this is ever removed
unfinished=$venv/set-up-unfinished

say() { printf '%s\n' "$*" >&2; }
refuse() { say "$@"; exit 1; }

# What an environment was made from: its stamp holds this text, so a touched but equal file changes nothing
# and a moved folder (whose scripts name the old place) is set up again.
made_from() {
    printf '%s\n' "$PWD"
    case $1 in
        run) cksum requirements.lock pyproject.toml ;;
        dev) cksum requirements-dev.lock pyproject.toml ;;
    esac
}
stands() {
    [ -f "$venv/stamp-$1" ] && [ ! -f "$unfinished" ] &&
        [ "$(cat "$venv/stamp-$1")" = "$(made_from "$1")" ] && "$venv/bin/python" -c '' 2>/dev/null
}

new_enough() { "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; }
find_python() {
    for candidate in ${PYTHON:-python3 python3.14 python3.13 python3.12 python3.11 python}; do
        if new_enough "$candidate"; then printf '%s' "$candidate"; return; fi
    done
    found=$("${PYTHON:-python3}" -c 'import sys; print("Python %d.%d" % sys.version_info[:2])' 2>/dev/null) ||
        found="no working '${PYTHON:-python3}'"
    say "Cutbank needs Python 3.11 or newer; here is $found."
    say "Install a newer one, or name it: make PYTHON=/where/it/is/python3.12 ..."
    return 1
}

# A folder that make did not make is used only if it is an untouched environment, replaced only if it is
# broken or empty, and otherwise left alone.
settle_existing() {
    [ -e "$venv" ] || return 0
    if [ -f "$ours" ]; then
        # Stopped half way, a package may be half unpacked and still look installed.
        if [ -f "$unfinished" ] || ! "$venv/bin/python" -m pip --version >/dev/null 2>&1; then rm -rf "$venv"; fi
        return 0
    fi
    if [ -z "$(ls -A "$venv" 2>/dev/null)" ]; then rmdir "$venv"; return 0; fi
    if "$venv/bin/python" -m pip --version >/dev/null 2>&1; then
        others=$("$venv/bin/python" -m pip list --format=freeze 2>/dev/null | grep -Evic '^(pip|setuptools|wheel)==')
        new_enough "$venv/bin/python" && [ "$others" -eq 0 ] && return 0
    elif [ -f "$venv/pyvenv.cfg" ]; then
        rm -rf "$venv"
        return 0
    fi
    say "The folder $venv was not made by this Makefile and holds something else, so it is left alone."
    refuse "Move it away (mv $venv $venv-old) or use another: make VENV=.venv-cutbank ..."
}

pip_install() {
    "$venv/bin/python" -m pip install --quiet --disable-pip-version-check --no-input --retries 2 "$@" >>"$log" 2>&1
}

case $want in run | dev) ;; *) refuse "setup.sh: 'run' or 'dev', not '$want'." ;; esac
if stands dev || { [ "$want" = run ] && stands run; }; then exit 0; fi

settle_existing
python=$(find_python) || exit 1
say "Setting up (once, about a minute)..."
if ! { mkdir -p "$venv" && : >"$ours" && : >"$unfinished"; } 2>/dev/null; then
    say "Nothing can be written to $PWD/$venv."
    refuse "Check the folder's permissions and the free space, then run the same command again."
fi
rm -f "$venv/stamp-run" "$venv/stamp-dev"

if ! "$venv/bin/python" -m pip --version >/dev/null 2>&1 && ! "$python" -m venv "$venv" >"$log" 2>&1; then
    say "Python could not make a virtual environment; its own words are in $log."
    refuse "On Debian or Ubuntu install the package python3-venv, then run the same command again."
fi

case $want in run) lock=requirements.lock ;; dev) lock=requirements-dev.lock ;; esac
# The project itself comes last, built with the locked backend, so that no build fetches anything.
if ! pip_install --require-hashes --no-deps -r "$lock"; then
    say "The packages could not be installed; pip's own words are in $log."
    refuse "Check that this machine reaches its package index (or set pip's index-url to a mirror), then run the same command again."
fi
if ! pip_install --no-deps --no-build-isolation --editable .; then
    say "The packages are there, but Cutbank itself could not be installed; pip's own words are in $log."
    refuse "Is this a whole checkout? Compare it with 'git status', then run the same command again."
fi

made_from "$want" >"$venv/stamp-$want"
rm -f "$unfinished"
