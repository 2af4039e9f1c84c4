# Sourced by quickstart and check, from the top of the tree: a .venv with steelyard in it.

export PIP_DISABLE_PIP_VERSION_CHECK=1 PIP_ROOT_USER_ACTION=ignore PIP_NO_INPUT=1

die() {
    echo "steelyard: $1" >&2
    exit 2
}

find_python() {
    local name
    for name in python3 python3.11 python3.12 python3.13 python3.14 python; do
        if "$name" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
            echo "$name"
            return
        fi
    done
    die "no Python 3.11 or newer on PATH; install one (python3.11 is enough) and run this again"
}

# run a command with its output in a log, which is shown only if it fails
quietly() {
    local log=$1
    shift
    if ! "$@" >"$log" 2>&1 </dev/null; then
        cat "$log" >&2
        die "failed: $* (its output is above and in $log)"
    fi
}

# install "" or "[test]"; steps already done for this pyproject.toml aren't done again
install_steelyard() {
    local extra=$1 python stamp name
    if ! .venv/bin/python -c 'import sys, pip; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
        python=$(find_python)
        echo "making .venv with $("$python" --version)"
        rm -rf .venv
        mkdir -p .cache
        quietly .cache/venv.log "$python" -m venv .venv
    fi
    stamp="$(.venv/bin/python -c '
import hashlib, pathlib
print(hashlib.sha256(b"".join(pathlib.Path(f).read_bytes() for f in ("pyproject.toml", "setup.py"))).hexdigest())
') $PWD"
    for name in "installed$extra" "installed[test]"; do
        if [ "$(cat ".venv/$name" 2>/dev/null)" = "$stamp" ]; then
            echo "steelyard$extra is installed in .venv already"
            return
        fi
    done
    echo "installing steelyard$extra into .venv (a minute or two the first time)"
    mkdir -p .cache
    quietly .cache/install.log .venv/bin/python -m pip install -e ".$extra"
    echo "$stamp" >".venv/installed$extra"
}
