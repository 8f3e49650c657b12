# Sourced by demo/run, tests/run and .ci/run: the one place that makes a virtual environment.
# POSIX sh; the caller has already changed to the top folder of the clone.

# Say what is wrong on stderr and stop with status 2 (bad input, nothing done).
give_up() {
    printf '%s\n' "$@" >&2
    exit 2
}

# True if "$1" starts a Python of at least 3.11.
is_new_enough() {
    "$1" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1
}

# Set python_found to the interpreter to use: $PYTHON if it is set, else the first that is new enough.
find_python() {
    if [ -n "${PYTHON:-}" ]; then
        version=$("$PYTHON" -c 'import sys; print("%d.%d.%d" % sys.version_info[:3])' 2>/dev/null) ||
            give_up "PYTHON=$PYTHON: this is not a Python that runs. Set PYTHON to one, or unset it."
        is_new_enough "$PYTHON" ||
            give_up "PYTHON=$PYTHON: expected Python 3.11 or newer, got $version. Set PYTHON to a newer one."
        python_found=$PYTHON
        return
    fi
    seen=""
    for candidate in python3 python3.14 python3.13 python3.12 python3.11 python; do
        if is_new_enough "$candidate"; then
            python_found=$candidate
            return
        fi
        version=$("$candidate" -c 'import sys; print("%d.%d.%d" % sys.version_info[:3])' 2>/dev/null) &&
            seen="$seen $candidate=$version"
    done
    give_up "Expected Python 3.11 or newer on the path, got${seen:- none}." \
        "Install one, or name it: PYTHON=/path/to/python3.12 sh $0"
}

# make_environment FOLDER WHAT: FOLDER is the environment, WHAT is what pip installs (".", ".[test]").
# Done once; done again when pyproject.toml, the interpreter or the place of the clone has changed.
make_environment() {
    folder=$1
    what=$2
    find_python
    mark=$("$python_found" -c '
import hashlib, pathlib, sys
text = pathlib.Path("pyproject.toml").read_text(encoding="utf-8")
place = str(pathlib.Path.cwd())
print(hashlib.sha256("\n".join([sys.version, sys.executable, place, *sys.argv[1:], text]).encode()).hexdigest())
' "$what")
    if [ -x "$folder/bin/python" ] && [ "$(cat "$folder/ready" 2>/dev/null)" = "$mark" ]; then
        return
    fi
    printf 'Making the environment %s (once; needs a network or a local package folder) ...\n' "$folder" >&2
    rm -rf "$folder"
    if ! "$python_found" -m venv "$folder" >"$folder.log" 2>&1; then
        cat "$folder.log" >&2
        rm -rf "$folder" "$folder.log"
        give_up "$python_found: it cannot make a virtual environment." \
            "Install its venv module (on Debian and Ubuntu: apt install python3-venv) and run this again."
    fi
    rm -f "$folder.log"
    if ! "$folder/bin/python" -m pip install --quiet --disable-pip-version-check --editable "$what"; then
        rm -rf "$folder"
        give_up "$folder: the packages could not be installed, see pip's lines above." \
            "Check the network or the package index, then run this again."
    fi
    printf '%s\n' "$mark" >"$folder/ready"
}
