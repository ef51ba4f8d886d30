#!/usr/bin/env bash
# From a fresh clone to an image: makes an environment, starts service and worker, sends the sample scan over HTTP,
# waits for its image, and stops everything again.
#
#   deploy/quickstart.sh [--keep]     --keep leaves the service running and prints its address
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")/.."

keep=no
case "${1-}" in
"") ;;
--keep) keep=yes ;;
-h | --help)
    sed -n '2,5s/^# \{0,1\}//p' "$0"
    exit 0
    ;;
*)
    echo "deploy/quickstart.sh: unknown argument $1; accepted is --keep." >&2
    exit 2
    ;;
esac

source deploy/python.sh
SECONDS=0
folder="$PWD/quickstart-files"
scan=sample_kspace/cut_fruit_undersampled.h5
data="$folder/data"
results="$folder/results"
log="$folder/service.log"
mkdir -p "$folder"

is_ours() { # PID: a process of this folder, and not another one that got the number of an ended one
    tr '\0' ' ' 2>/dev/null <"/proc/$1/cmdline" | grep -qF "$folder"
}

if [ -f "$folder/service.pid" ] && is_ours "$(cat "$folder/service.pid")"; then
    echo "The service of an earlier --keep still runs: stop it with \`kill $(cat "$folder/service.pid")\` first." >&2
    exit 1
fi

make_environment "$folder/venv" deploy/requirements-server.txt
bin="$folder/venv/bin"

unset FALLOW_URL FALLOW_TOKEN
export FALLOW_DATA="$data"
port="$("$bin/python" deploy/free_port.py)"
export FALLOW_URL="http://127.0.0.1:$port"

service=
stop_service() {
    local code=$?
    trap - EXIT INT TERM
    if [ -n "$service" ] && kill -0 "$service" 2>/dev/null; then
        kill -TERM "$service"
        for _ in $(seq 100); do
            kill -0 "$service" 2>/dev/null || break
            sleep 0.1
        done
        kill -KILL "$service" 2>/dev/null || true
        wait "$service" 2>/dev/null || true
    fi
    rm -f "$folder/service.pid"
    exit "$code"
}
trap stop_service EXIT
trap 'exit 130' INT
trap 'exit 143' TERM

echo "Starting service and worker on $FALLOW_URL ..."
# A session of its own, so that Ctrl-C reaches this script alone and --keep outlives the terminal.
setsid "$bin/fallow" serve --host 127.0.0.1 --port "$port" --data "$data" >"$log" 2>&1 </dev/null &
service=$!
echo "$service" >"$folder/service.pid"
if ! "$bin/python" deploy/wait_ready.py "$FALLOW_URL" "$service"; then
    echo "The service did not start; the end of $log:" >&2
    tail -n 20 "$log" >&2
    exit 1
fi

echo "Sending $scan ..."
job="$("$bin/fallow" submit "$scan" --label quickstart --wait --json |
    "$bin/python" -c 'import json, sys; print(json.load(sys.stdin)["id"])')"
echo "Results:"
"$bin/fallow" collect "$job" -o "$results"
echo "Done in $SECONDS s."

if [ "$keep" = yes ]; then
    trap - EXIT INT TERM
    printf 'export FALLOW_URL=%q FALLOW_DATA=%q PATH=%q:"$PATH"\n' "$FALLOW_URL" "$data" "$bin" >"$folder/environment.sh"
    echo "The service goes on at $FALLOW_URL; stop it with \`kill $service\`."
    echo "To use it from this shell: source quickstart-files/environment.sh"
fi
