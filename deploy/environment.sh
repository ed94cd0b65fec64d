# Sourced by deploy/demo.sh and tests/run.sh: makes an environment in this checkout and installs into it.
# Usage: make_environment FOLDER WHAT…    (WHAT as pip takes it, for example -e '.[test]')

fail() {
    echo "limbtell: $1" >&2
    exit 2
}

# Sets PYTHON to an interpreter that is new enough.
find_python() {
    for candidate in "${PYTHON:-}" python3 python3.14 python3.13 python3.12 python3.11 python; do
        [ -n "$candidate" ] && command -v "$candidate" >/dev/null 2>&1 || continue
        if "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            PYTHON=$candidate
            return
        fi
        seen="$seen $candidate ($("$candidate" -V 2>&1))"
    done
    fail "Python 3.11 or newer is needed; found:${seen:- none}. Install it, or name one: PYTHON=/path/to/python3 sh $0"
}

make_environment() {
    folder=$1
    shift
    seen=
    find_python
    "$PYTHON" -c 'import venv, ensurepip' 2>/dev/null ||
        fail "$PYTHON has no module venv or ensurepip. Where apt-get is the package manager: apt-get install python3-venv"
    wanted=$("$PYTHON" -c 'import hashlib, sys; print(hashlib.sha256(open("pyproject.toml", "rb").read() + " ".join(sys.argv).encode()).hexdigest())' "$@")
    if [ "$(cat "$folder/installed" 2>/dev/null)" = "$wanted" ]; then
        return
    fi
    echo "limbtell: making the environment $folder with $("$PYTHON" -V) …" >&2
    rm -rf "$folder"
    "$PYTHON" -m venv "$folder" || fail "$PYTHON could not make the environment $folder"
    "$folder/bin/python" -m pip install --quiet --disable-pip-version-check "$@" >"$folder/install.log" 2>&1 || {
        tail -n 15 "$folder/install.log" >&2
        fail "pip could not install $*. Is there a network and a package index it can reach? The whole log: $folder/install.log"
    }
    echo "$wanted" >"$folder/installed"
}
