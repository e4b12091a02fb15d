#!/bin/sh
# First run, from a fresh clone: makes .venv, installs Edgewatch into it, and rehearses: the whole station on a
# simulated line. Options are handed to `edgewatch rehearse`. Needs neither root nor a broker.
#   sh deploy/first-run.sh [OPTION...]
set -eu
top=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd -P)
. "$top/deploy/prepare.sh"

install_edgewatch ''
PATH=$PATH:/usr/sbin:/sbin # Debian keeps mosquitto there, and an ordinary user's PATH does not
export PATH
if ! command -v mosquitto >/dev/null 2>&1; then
    say "no mosquitto on this machine: this rehearsal keeps its journal and sends no messages" \
        "(Debian, as root: apt-get install mosquitto)"
fi
exec "$venv/bin/edgewatch" rehearse "$@"
