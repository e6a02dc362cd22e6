#!/bin/sh
# Shows Strandline at work, from a fresh clone and from any folder: sh deploy/demo.sh [--seconds N]
# Sets up .venv in this repository the first time, then runs `strandline demo` with the options given.
set -eu

root=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd -P)
sh "$root/deploy/set-up.sh"
exec "$root/.venv/bin/python" -m strandline.cli demo "$@"
