# Makes .venv in the repository and installs Byway into it with everything the demo and the
# tests need, in the exact versions of constraints.txt. Sourced by try.sh and check.sh, which
# set `root`; needs only Python 3.11 to 3.13 and a package index. Quick when nothing changed.

suits() {
    # venv and ensurepip are missing on some systems until a package of their own is installed.
    "$1" -c 'import sys, venv, ensurepip; sys.exit(not (3, 11) <= sys.version_info[:2] <= (3, 13))' \
        >/dev/null 2>&1
}

find_python() {
    for candidate in python3.13 python3.12 python3.11 python3 python; do
        if suits "$candidate"; then
            echo "$candidate"
            return 0
        fi
    done
    echo "Byway needs Python 3.11, 3.12 or 3.13 with its venv module, and found none of them." >&2
    echo "Looked for python3.13, python3.12, python3.11, python3 and python on the PATH." >&2
    echo "On Debian and Ubuntu: apt install python3 python3-venv" >&2
    return 1
}

stamp() {
    # The place is part of it: a virtual environment does not survive being moved.
    { echo "$root"; cat "$root/pyproject.toml" "$root/deploy/constraints.txt"; } | cksum
}

prepare_venv() {
    venv="$root/.venv"
    if [ "$(cat "$venv/byway-stamp" 2>/dev/null)" = "$(stamp)" ] && "$venv/bin/python" -c '' 2>/dev/null; then
        return 0
    fi
    if ! suits "$venv/bin/python"; then
        python=$(find_python) || return 1
        echo "== making .venv with $("$python" --version)"
        "$python" -m venv --clear "$venv" || return 1
    fi
    echo "== installing into .venv (a minute or two the first time)"
    export PIP_DISABLE_PIP_VERSION_CHECK=1
    pip_install() { "$venv/bin/python" -m pip install -qq --constraint "$root/deploy/constraints.txt" "$@"; }
    # The build backend first and without isolation: pip would otherwise fetch whatever is newest.
    pip_install hatchling || return 1
    pip_install --no-build-isolation --editable "$root[daemon,test]" || return 1
    stamp >"$venv/byway-stamp"
}
