#!/bin/sh
# Every check that a change has to pass. Arguments go to pytest (for instance: -k settings).
set -eu
root=$(cd "$(dirname "$0")/.." && pwd)
. "$root/deploy/venv.sh"
prepare_venv
cd "$root"
PATH="$root/.venv/bin:$PATH"
export PATH

# All of them, even when one fails: whoever reads the report wants to know everything at once.
failed=""
step() {
    name=$1
    shift
    echo "== $name"
    "$@" || failed="$failed $name;"
}
step "style" ruff check --quiet .
step "format" ruff format --check --quiet .
step "types" mypy
step "imports between the rooms" lint-imports --no-logo
step "tests" pytest -q "$@"

if [ -n "$failed" ]; then
    echo "== failed:$failed"
    exit 1
fi
echo "== all passed"
