#!/bin/sh
# Sets up .venv in this repository and installs the project into it: sh deploy/set-up.sh [EXTRA]
#
# Needs Python 3.11 or newer and, to make a new environment, either its venv module or pip (Debian: python3-venv or
# python3-pip). Changes nothing outside of .venv. Quick when there is nothing to do: a stamp in .venv says what was
# installed for which pyproject.toml and which folder. Progress goes to stderr.
set -eu

root=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd -P)
extra=${1:-}
venv=$root/.venv
stamp=$venv/.installed${extra:+-$extra}
want="$root $(cksum < "$root/pyproject.toml")"

# Whoever asks for no extra is served by an environment that has one.
set --
[ -n "$extra" ] || set -- "$venv"/.installed-*
for done in "$stamp" "$@"; do
    if [ -x "$venv/bin/python" ] && [ "$(cat "$done" 2> /dev/null)" = "$want" ]; then
        exit 0
    fi
done

is_recent() {
    "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' > /dev/null 2>&1
}

find_python() {
    for name in python3 python3.14 python3.13 python3.12 python3.11; do
        if is_recent "$name"; then
            echo "$name"
            return
        fi
    done
    echo "set-up: needs Python 3.11 or newer on the PATH (Debian: apt-get install python3 python3-venv)" >&2
    return 1
}

# pip SUBCOMMAND...: pip for the environment, its own or, where it was made without one, the pip that made it.
pip() {
    if "$venv/bin/python" -m pip --version > /dev/null 2>&1; then
        "$venv/bin/python" -m pip "$@" >&2
    else
        "$(find_python)" -m pip --python "$venv/bin/python" "$@" >&2
    fi
}

make_venv() {
    python=$(find_python)
    echo "set-up: making .venv with $("$python" --version)" >&2
    if "$python" -c 'import ensurepip; ensurepip.version()' > /dev/null 2>&1; then
        "$python" -m venv --clear "$venv" >&2
    elif "$python" -m pip --version > /dev/null 2>&1; then
        "$python" -m venv --clear --without-pip "$venv" >&2
    else
        echo "set-up: $python has neither venv nor pip (Debian: apt-get install python3-venv)" >&2
        return 1
    fi
}

# An environment that does not run, or that came along with a copied folder and points to the old one, is made anew.
made_for=$(cat "$venv/.made-for" 2> /dev/null || echo "$root")
if ! is_recent "$venv/bin/python" || [ "$made_for" != "$root" ]; then
    make_venv
fi
echo "$root" > "$venv/.made-for"

echo "set-up: installing strandline${extra:+ with its extra \"$extra\"} into .venv" >&2
rm -f "$stamp"
pip install --quiet --disable-pip-version-check --editable "$root${extra:+[$extra]}"
echo "$want" > "$stamp"
