# Sourced by the other scripts: makes or reuses .venv in the checkout and puts it first in PATH.
# The stamp names what was installed where, so that a second run starts at once.
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")/.."

say() { printf '== %s\n' "$*"; }
fail() { printf 'error: %s\n' "$*" >&2; exit 1; }

find_python() {
    local candidate
    for candidate in ${PYTHON:-python3.11 python3 python}; do
        if "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            command -v "$candidate"
            return
        fi
    done
    fail "no Python 3.11 or later found; install it, or name it: PYTHON=/path/to/python3.11 $0"
}

wanted_stamp() { { pwd; cat pyproject.toml configs/constraints.txt; } | cksum; }

make_environment() {
    local python
    python=$(find_python)
    "$python" -c 'import venv, ensurepip' 2>/dev/null ||
        fail "$python lacks the module venv; install it (Debian, Ubuntu: apt install python3-venv)"
    say "making .venv with $python (the first time: several minutes, some gigabytes)"
    "$python" -m venv --clear .venv
}

install() {
    [ -x .venv/bin/python ] && .venv/bin/python -c 'import pip' 2>/dev/null || make_environment
    say "installing emu-flares and its pinned dependencies into .venv"
    .venv/bin/python -m pip install -qq --disable-pip-version-check \
        --constraint configs/constraints.txt --editable '.[test]'
    wanted_stamp > .venv/emu-flares.stamp
}

if [ "$(wanted_stamp)" = "$(cat .venv/emu-flares.stamp 2>/dev/null)" ]; then
    say "using .venv as it is"
else
    install
fi

PATH="$PWD/.venv/bin:$PATH"
# Work is shared among processes: a second thread in each only slows the others.
export PATH OMP_NUM_THREADS="${OMP_NUM_THREADS:-1}"

torch=$(python -c 'from importlib.metadata import version; print(version("torch"))')
case "$torch" in
    *+cpu) ;;
    *) say "warning: torch $torch is not a CPU build; going on, on the CPU" \
           "(smaller: pip install --index-url https://download.pytorch.org/whl/cpu torch==${torch%%+*})" ;;
esac
