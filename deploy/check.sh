#!/bin/sh
# Check everything: style, types, all tests. Says by name which tests were skipped, and why.
# With TALLYWARD_CHECK_NO_SKIP=1 a skipped test is a failure. Arguments go to pytest.
set -eu
cd "$(dirname "$0")/.."
. deploy/environment.sh
make_environment .venv-check check

failed=
check() { # NAME COMMAND ...: go on after a failure, so that one run tells all
    name=$1
    shift
    echo "== $name"
    "$@" || failed="$failed, $name"
}
check style .venv-check/bin/python -m ruff check .
check format .venv-check/bin/python -m ruff format --check .
check types .venv-check/bin/python -m mypy
check tests .venv-check/bin/python -m pytest -rs "$@"
if [ -n "$failed" ]; then
    echo "FAILED: ${failed#, }" >&2
    exit 1
fi
echo "All checks passed."
