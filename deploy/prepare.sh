# Sourced by first-run.sh and run-tests.sh: finds Python, makes .venv at the top of the tree, installs into it.
# shellcheck shell=sh disable=SC2154
# POSIX sh. Expects $top; everything said goes to stderr, so that stdout belongs to what is run afterwards.

venv=$top/.venv

say() {
    printf '%s\n' "${0##*/}: $*" >&2
}

give_up() { # what is not there, and the remedy: exit status 3, as the commands have it
    say "$*"
    exit 3
}

may_install() { # only root, and only with Debian's own tool
    [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null 2>&1
}

install_debian() ( # NAME...: from Debian, starting no service; fails when one cannot be had
    say "installing from Debian: $*"
    export DEBIAN_FRONTEND=noninteractive
    # A package that brings a service would start it, and the tests' own brokers want to be alone with theirs.
    policy=/usr/sbin/policy-rc.d
    if [ ! -e "$policy" ]; then
        trap 'rm -f "$policy"' EXIT
        trap 'exit 130' INT
        trap 'exit 143' TERM
        printf '#!/bin/sh\nexit 101\n' >"$policy"
        chmod 755 "$policy"
    fi
    apt-get -qq -o DPkg::Lock::Timeout=120 update >&2 ||
        say "the package lists could not be renewed; trying with the old ones"
    apt-get -qq -y -o DPkg::Lock::Timeout=120 install --no-install-recommends "$@" >&2
)

find_python() { # CHECK -> prints a Python 3.10 or newer for which the statement CHECK works
    for name in python3 /usr/bin/python3 python3.14 python3.13 python3.12 python3.11 python3.10; do
        if "$name" -c "import sys; assert sys.version_info >= (3, 10); $1" >/dev/null 2>&1; then
            printf '%s\n' "$name"
            return 0
        fi
    done
    return 1
}

make_venv() { # a usable .venv, made anew when the Python that it was made from has gone
    if [ -x "$venv/bin/python" ] && "$venv/bin/python" -m pip --version >/dev/null 2>&1; then
        return 0
    fi
    python=$(find_python 'import venv, ensurepip') || {
        may_install && install_debian python3 python3-venv
        python=$(find_python 'import venv, ensurepip') || {
            if find_python 'pass' >/dev/null; then
                give_up "Python is here and its venv module is not;" \
                    "install it (Debian, as root: apt-get install python3-venv)"
            fi
            give_up "Python 3.10 or newer is needed (Debian 12 and later, as root: apt-get install python3 python3-venv)"
        }
    }
    say "making $venv"
    "$python" -m venv --clear "$venv" >&2 || give_up "$venv could not be made with $python"
}

fingerprint() { # of everything that an installation is made from but the sources, which it refers to
    printf '%s ' "$top"
    (cd "$top" && find pyproject.toml edgewatch/__init__.py deploy/build_sight.py deploy/build_hook.py \
        deploy/station.toml calib edgewatch/sight/native/*.[ch] -type f -exec cksum {} + | LC_ALL=C sort) | cksum
}

compiled() { # the sight is, or cannot be
    [ -e "$top/edgewatch/sight/native/compiled.bin" ] || ! command -v cc >/dev/null 2>&1
}

install_edgewatch() { # EXTRAS: '' or '[test,desk]'; nothing to do when nothing has changed since the last time
    make_venv
    case $1 in
        '') marks="station" ;;
        *) marks="station tests" ;; # whoever has the extras has the station
    esac
    now=$(fingerprint)
    for mark in $marks; do last=$mark; done
    if [ "$(cat "$venv/installed-$last" 2>/dev/null)" = "$now" ] && compiled; then
        return 0
    fi
    say "installing edgewatch$1 into $venv (once; a minute or so)"
    "$venv/bin/python" -m pip install --quiet --disable-pip-version-check --editable "$top$1" >&2 ||
        give_up "edgewatch could not be installed: see above; pip has to reach its package index"
    for mark in $marks; do printf '%s\n' "$now" >"$venv/installed-$mark"; done
}
