#!/bin/sh
# Sets limbtell up in an environment of its own and runs the demo: a simulated robot, watched by the real daemon.
# Arguments go to the command:  sh deploy/demo.sh --seconds 20
set -eu
cd "$(dirname "$0")/.."
. deploy/environment.sh
make_environment .venv-demo -e .
exec .venv-demo/bin/limbtell demo "$@"
