#!/bin/sh
# Sets up what the tests need and runs all of them: style, types, import arrows, tests, and the wheel.
# Arguments go to pytest; with arguments only pytest is run:  sh tests/run.sh tests/flow -k align
set -eu
cd "$(dirname "$0")/.."
. deploy/environment.sh
make_environment .venv -e '.[test]'
bin=.venv/bin

if [ $# -gt 0 ]; then
    exec $bin/python -m pytest "$@"
fi

$bin/ruff check .
$bin/ruff format --check .
$bin/mypy
$bin/lint-imports
$bin/python -m pytest -n 2 --dist loadfile

# The wheel, installed by itself, tested from elsewhere: what a user gets, not what lies in the checkout.
elsewhere=$(mktemp -d)
trap 'rm -rf "$elsewhere"' EXIT
$bin/python -m build --wheel --outdir "$elsewhere/wheel" . >"$elsewhere/build.log" 2>&1 || {
    tail -n 20 "$elsewhere/build.log" >&2
    exit 1
}
make_environment .venv-wheel pytest
pip="$PWD/.venv-wheel/bin/python -m pip install --quiet --disable-pip-version-check"
$pip "$elsewhere"/wheel/*.whl
$pip --no-deps --force-reinstall "$elsewhere"/wheel/*.whl # the version may be the same as before, the code not
cp tests/test_installed.py "$elsewhere/"
cd "$elsewhere"
"$OLDPWD/.venv-wheel/bin/python" -P -m pytest -q -m installed -c /dev/null --rootdir "$elsewhere" test_installed.py \
    -W error -o markers='installed: runs against the installed wheel'
