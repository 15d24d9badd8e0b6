# Shared by app/run and tests/run: a private environment in the checkout, made once and remade when its recipe changes.
# Usage: . app/setup.sh; meseta_setup EXTRA   (EXTRA is "" or "[test]" or "[dev]"), from the checkout's top folder.

say() { printf '%s\n' "$*" >&2; }

can_apt() { [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null 2>&1; }

apt_install() {
    apt-get update -qq >/dev/null 2>&1
    DEBIAN_FRONTEND=noninteractive apt-get install -y -qq "$@" >/dev/null 2>&1
}

find_python() {
    for name in python3.13 python3.12 python3.11 python3; do
        if command -v "$name" >/dev/null 2>&1 &&
            "$name" -c 'import sys; sys.exit(not ((3, 11) <= sys.version_info[:2] < (3, 14)))' >/dev/null 2>&1; then
            command -v "$name"
            return 0
        fi
    done
    say "meseta: no Python from 3.11 to 3.13 was found -> install one (Debian, Ubuntu: apt-get install python3; macOS: from python.org)"
    return 2
}

make_environment() {
    if ! "$1" -m venv .venv >/dev/null 2>&1; then
        rm -rf .venv
        if can_apt && apt_install python3-venv && "$1" -m venv .venv >/dev/null 2>&1; then return 0; fi
        rm -rf .venv
        say "meseta: Python's venv module is missing -> run: sudo apt-get install python3-venv"
        return 2
    fi
}

qt_packages="libegl1 libgl1 libxkbcommon0 libxkbcommon-x11-0 libdbus-1-3 libfontconfig1 libxcb-cursor0 libxcb-icccm4 libxcb-image0 libxcb-keysyms1 libxcb-randr0 libxcb-render-util0 libxcb-shape0 libxcb-xinerama0"

check_qt() {
    if .venv/bin/python -c 'import PySide6.QtWidgets' >/dev/null 2>&1; then return 0; fi
    # shellcheck disable=SC2086 # a list of package names
    if can_apt && apt_install $qt_packages && .venv/bin/python -c 'import PySide6.QtWidgets' >/dev/null 2>&1; then return 0; fi
    if command -v apt-get >/dev/null 2>&1; then
        say "meseta: the window needs system libraries that are missing -> run: sudo apt-get install $qt_packages"
    else
        say "meseta: the window needs Qt's system libraries, which are missing here"
    fi
    say "meseta: the command line works without them"
}

meseta_setup() {
    hash=$(cat pyproject.toml app/meseta/kernels.py app/meseta/*/*kernels.py | cksum | tr ' ' '-')
    case "$1" in
    "") enough="plain test dev" stamp=plain ;;
    "[test]") enough="test dev" stamp=test ;;
    *) enough=dev stamp=dev ;;
    esac
    for done in $enough; do # what was set up for more serves for less
        [ -f ".venv/set-up-$hash-$done" ] && return 0
    done
    python=$(find_python) || return 2
    if [ ! -x .venv/bin/python ] || ! .venv/bin/python -c '' >/dev/null 2>&1; then
        say "meseta: making a private environment in .venv"
        rm -rf .venv
        make_environment "$python" || return 2
    fi
    say "meseta: installing Meseta and the libraries it needs (once; a few minutes)"
    if ! .venv/bin/python -m pip install --quiet --disable-pip-version-check --editable ".$1" 2>.venv/install.log; then
        tail -n 5 .venv/install.log >&2
        say "meseta: the libraries could not be installed -> see .venv/install.log; check the network connection"
        return 2
    fi
    check_qt
    say "meseta: compiling the kernels (once)"
    .venv/bin/python -m meseta.kernels >&2 || return 2
    for old in .venv/set-up-*; do
        case "$old" in *"$hash"*) ;; *) rm -f "$old" ;; esac
    done
    : >".venv/set-up-$hash-$stamp"
}
