# Sourced by deploy/demo and deploy/check: finds Python, makes .venv, installs this project into it.
# Offline machines: pip's own variables are honoured, e.g. PIP_NO_INDEX=1 PIP_FIND_LINKS=/media/wheels.

say() { printf '%s\n' "$*" >&2; }

give_up() { say "$*"; exit 2; }

new_enough() { "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; }

find_python() {     # prints the first interpreter that is 3.11 or later; BELLASSAY_PYTHON is tried first
    for name in ${BELLASSAY_PYTHON:-} python3 python3.11 python3.12 python3.13 python3.14; do
        if command -v "$name" >/dev/null 2>&1 && new_enough "$name"; then command -v "$name"; return 0; fi
    done
    return 1
}

by_apt() {          # installs Debian packages when we are root and apt is there; fails otherwise
    [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null 2>&1 || return 1
    say "installing $* with apt-get"
    { apt-get update -q && DEBIAN_FRONTEND=noninteractive apt-get install -y -q --no-install-recommends "$@"; } >&2
}

make_environment() {    # make_environment ROOT: afterwards "$python" is the interpreter of ROOT/.venv
    python=$1/.venv/bin/python
    if [ -x "$python" ] && new_enough "$python" && "$python" -m pip --version >/dev/null 2>&1; then return 0; fi
    if ! base=$(find_python); then
        by_apt python3 python3-venv || give_up "Python 3.11 or later is needed; on Debian: sudo apt install python3 python3-venv"
        base=$(find_python) || give_up "this Debian has no Python 3.11; set BELLASSAY_PYTHON to one"
    fi
    if ! "$base" -c 'import ensurepip, venv' 2>/dev/null; then
        by_apt python3-venv || give_up "Python's venv module is missing; on Debian: sudo apt install python3-venv"
    fi
    say "making $1/.venv with $base"
    "$base" -m venv --clear "$1/.venv"
}

install_project() {     # install_project ROOT WHAT...: WHAT as for pip install
    root=$1; shift
    rm -rf "$root/build"    # setuptools would pack modules from there that have been deleted since
    (cd "$root" && "$python" -m pip install --quiet --disable-pip-version-check "$@") >&2 ||
        give_up "pip could not install the project; without a network give it a folder of wheels: PIP_NO_INDEX=1 PIP_FIND_LINKS=FOLDER $0"
}
