# Sourced by the scripts in this folder: finds a supported Python and makes an environment from a lock.
# Nothing of the caller's own Python set-up may leak into it.
unset PYTHONPATH PYTHONHOME PIP_USER PIP_REQUIRE_VIRTUALENV PIP_TARGET PIP_PREFIX VIRTUAL_ENV
export PIP_DISABLE_PIP_VERSION_CHECK=1 PIP_NO_INPUT=1

is_supported() { # PYTHON: 3.11 to 3.14, able to make environments
    "$1" -c 'import sys, ensurepip, venv; sys.exit(not (3, 11) <= sys.version_info[:2] <= (3, 14))' >/dev/null 2>&1
}

find_python() { # prints the path of a supported Python
    local name path
    # FALLOW_PYTHON names one where several are installed.
    for name in ${FALLOW_PYTHON:+"$FALLOW_PYTHON"} python3 python3.14 python3.13 python3.12 python3.11 python; do
        if path="$(command -v "$name")" && is_supported "$path"; then
            echo "$path"
            return
        elif [ "$name" = "${FALLOW_PYTHON:-}" ]; then
            echo "FALLOW_PYTHON=$name is no Python 3.11 to 3.14 with the modules venv and ensurepip: name another." >&2
            return 1
        fi
    done
    for path in "$HOME"/.pyenv/versions/3.1[1-4]*/bin/python; do
        if [ -x "$path" ] && is_supported "$path"; then
            echo "$path"
            return
        fi
    done
    echo "Fallow needs Python 3.11, 3.12, 3.13 or 3.14 with the modules venv and ensurepip, and none was found:" >&2
    echo "install one (on Debian and Ubuntu: python3 and python3-venv) or name it in FALLOW_PYTHON." >&2
    return 1
}

make_environment() { # FOLDER LOCK [LOCK-WITHOUT-DEPENDENCIES]: made anew when Python or a lock changed
    local folder="$1" python wanted
    shift
    python="$(find_python)"
    wanted="$(pwd) $("$python" -c 'import sys; print(sys.executable, sys.version)') $(cat "$@" pyproject.toml | cksum)"
    if [ -f "$folder/made-from" ] && [ "$(cat "$folder/made-from")" = "$wanted" ]; then
        return
    fi
    echo "Making an environment with $("$python" --version) in $folder ..." >&2
    rm -rf "$folder"
    "$python" -m venv "$folder"
    local pip=("$folder/bin/python" -m pip install -qq --no-compile)
    # Wheels only: a fresh machine has no compiler.
    "${pip[@]}" --require-hashes --only-binary :all: --requirement "$1"
    if [ $# -gt 1 ]; then
        "${pip[@]}" --require-hashes --only-binary :all: --no-deps --requirement "$2"
    fi
    # Fallow itself; its build backend is in the lock.
    "${pip[@]}" --no-index --no-deps --no-build-isolation --editable .
    echo "$wanted" >"$folder/made-from"
}
