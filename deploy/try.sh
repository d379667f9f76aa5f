#!/bin/sh
# Shows Byway at work: a daemon, and a simulated yard in which three vehicles drive by nothing
# but its answers, for 30 seconds. Arguments go to `byway demo` (for instance: --seconds 60).
set -eu
root=$(cd "$(dirname "$0")/.." && pwd)
. "$root/deploy/venv.sh"
prepare_venv
if [ $# -eq 0 ]; then
    set -- --seconds 30
fi
exec "$root/.venv/bin/byway" demo "$@"
