#!/bin/sh
# Runs all tests, from a fresh clone: installs what they need (Debian packages when root, the rest into .venv), then
# runs pytest on two cores. Arguments are handed to pytest.
#   sh deploy/run-tests.sh [ARGUMENT...]
set -eu
top=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd -P)
. "$top/deploy/prepare.sh"

PATH=$PATH:/usr/sbin:/sbin # Debian keeps mosquitto there, and an ordinary user's PATH does not
export PATH

missing_packages() { # the Debian packages whose program, the first word, is not on this machine
    while read -r program packages; do
        command -v "$program" >/dev/null 2>&1 || printf '%s ' "$packages"
    done <<'LIST'
mosquitto mosquitto
mosquitto_sub mosquitto-clients
ffmpeg ffmpeg
openssl openssl
git git
systemd-analyze systemd
cc gcc libc6-dev
LIST
}

missing=$(missing_packages)
if [ -n "$missing" ]; then
    may_install || give_up "the tests need these Debian packages: ${missing% } (as root: apt-get install ${missing% })"
    # shellcheck disable=SC2086 # a list of names
    install_debian $missing || give_up "Debian packages that the tests need could not be installed: $missing"
    case " $missing" in
        *" mosquitto "*) # it came for the tests: the packaged broker shall not take port 1883 at the next boot either
            ! command -v systemctl >/dev/null 2>&1 || systemctl --quiet disable mosquitto.service >&2 || :
            ;;
    esac
    missing=$(missing_packages)
    [ -z "$missing" ] || give_up "still missing after the installation: $missing"
fi
install_edgewatch '[test,desk]'

cd "$top"
# Two workers on two cores: a numerical library that starts threads of its own would only get in the way.
OMP_NUM_THREADS=${OMP_NUM_THREADS:-1} OPENBLAS_NUM_THREADS=${OPENBLAS_NUM_THREADS:-1}
export OMP_NUM_THREADS OPENBLAS_NUM_THREADS
exec "$venv/bin/python" -m pytest -n 2 --dist worksteal "$@"
