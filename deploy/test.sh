#!/usr/bin/env bash
# Installs what the tests need, from the lock, and runs them: lint, format, types, tests.
# Arguments go to pytest and leave the other checks out, for example: deploy/test.sh tests/client -k retries
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")/.."
source deploy/python.sh

environment=.venv-test
make_environment "$environment" deploy/requirements-test.txt deploy/requirements-data.txt
bin="$PWD/$environment/bin"
export PATH="$bin:$PATH"
# The tests start services of their own; whatever the caller uses stays out of them.
unset FALLOW_DATA FALLOW_URL FALLOW_TOKEN FALLOW_THREADS

if [ $# -eq 0 ]; then
    "$bin/ruff" check .
    "$bin/ruff" format --check .
    "$bin/mypy"
fi
exec "$bin/python" -m pytest "$@"
