# Read by tools/start and tools/check (POSIX sh): makes .venv in the project's root and fills it.
#
# Files in .venv that say how far it is:
#   carriersim-installing  an installation has begun and not ended: the next call starts afresh
#   carriersim-base        complete for running; holds a copy of what was asked for
#   carriersim-test        complete for the tests; the same
# The caller sets `command_name` and `root`.

venv=$root/.venv
python=$venv/bin/python
unset PYTHONHOME PYTHONPATH
supported='import sys; sys.exit(sys.version_info < (3, 11))'

say() {
    printf '%s: %s\n' "$command_name" "$*"
}

fail() {
    printf '%s: %s\n' "$command_name" "$*" >&2
    exit 1
}

# Prints what an environment of kind $1 (base or test) depends on.
wanted() {
    printf 'for %s in %s\n' "$1" "$root"
    grep '^__version__' "$root/carriersim/__init__.py"
    cat "$root/pyproject.toml" "$root/tools/requirements.txt"
    if [ "$1" = test ]; then
        cat "$root/tools/requirements-test.txt"
    fi
}

works() {
    "$1" -c "$supported" >/dev/null 2>&1
}

version_of() {
    "$1" -c 'import sys; print("%d.%d" % sys.version_info[:2])'
}

ours() {
    [ -e "$venv/carriersim-installing" ] || [ -e "$venv/carriersim-base" ]
}

mark_incomplete() {
    # Not the builtin `:`, with which a failing redirection would end the shell.
    printf '' 2>/dev/null >"$venv/carriersim-installing" || fail "Cannot write in $venv."
}

# Sets `base_python` to an interpreter that can make an environment, or says what is missing.
find_python() {
    if [ -n "${PYTHON:-}" ]; then
        works "$PYTHON" || fail "PYTHON=$PYTHON is not a Python of version 3.11 or newer."
        "$PYTHON" -c 'import ensurepip, venv' >/dev/null 2>&1 || no_venv_module "$PYTHON"
        base_python=$PYTHON
        return
    fi
    incomplete=
    for base_python in python3.13 python3.12 python3.11 python3; do
        if works "$base_python"; then
            if "$base_python" -c 'import ensurepip, venv' >/dev/null 2>&1; then
                return
            fi
            incomplete=${incomplete:-$base_python}
        fi
    done
    if [ -n "$incomplete" ]; then
        no_venv_module "$incomplete"
    fi
    fail "No Python of version 3.11 or newer was found: install one (3.11 to 3.13)," \
        "or name it, as in PYTHON=/path/to/python3 sh tools/$command_name"
}

no_venv_module() {
    fail "$1 lacks the module venv or ensurepip: install it" \
        "(Debian and Ubuntu: apt-get install python$(version_of "$1")-venv)."
}

# Makes an empty .venv, or leaves one that can be used as it is.
make_venv() {
    if [ -d "$venv" ]; then
        if [ ! -e "$venv/carriersim-installing" ] && works "$python" && same_place &&
            same_version && "$python" -m pip --version >/dev/null 2>&1; then
            mark_incomplete
            return
        fi
        # Only what is an environment, or the empty start of one, may be thrown away.
        ours || [ -e "$venv/pyvenv.cfg" ] || rmdir -- "$venv" 2>/dev/null ||
            fail "$venv is not a virtual environment: move it away and run this again."
    elif [ -e "$venv" ]; then
        fail "$venv is not a folder: move it away and run this again."
    fi
    find_python
    if [ -d "$venv" ]; then
        say "making .venv anew (it is incomplete, or of another place or Python)"
    fi
    rm -rf -- "$venv" || fail "Cannot remove the old $venv."
    mkdir -- "$venv" 2>/dev/null || fail "Cannot make the folder $venv: is $root writable?"
    mark_incomplete
    "$base_python" -m venv "$venv" >"$venv/install.log" 2>&1 || {
        tail -n 5 "$venv/install.log" >&2
        fail "$base_python could not make a virtual environment in $venv."
    }
}

# An environment of ours that was moved holds scripts that point to its old place.
same_place() {
    [ ! -e "$venv/carriersim-base" ] ||
        [ "$(head -n 1 "$venv/carriersim-base")" = "for base in $root" ]
}

same_version() {
    [ -z "${PYTHON:-}" ] || ! works "$PYTHON" ||
        [ "$(version_of "$PYTHON")" = "$(version_of "$python")" ]
}

pip_install() {
    "$python" -m pip install --disable-pip-version-check --no-input "$@" \
        >>"$venv/install.log" 2>&1 || explain_pip
}

explain_pip() {
    log=$venv/install.log
    if grep -q -i -e 'No space left' "$log"; then
        fail "The disk is full: the packages need about 800 MB in $root."
    elif grep -q -i -e 'Retrying (' -e 'Max retries' -e 'NewConnectionError' \
        -e 'name resolution' -e 'timed out' -e 'ProxyError' -e 'Connection' "$log"; then
        if [ -e "$venv/carriersim-base" ]; then
            # pip fetches all before it installs any: what was complete still is.
            rm -f -- "$venv/carriersim-installing"
        fi
        fail "The Python packages could not be fetched: there is no network" \
            "connection to the package index. Details: $log"
    elif grep -q -e 'No matching distribution' "$log"; then
        fail "The package index has no ready-made package for Python" \
            "$(version_of "$python") on this machine: use Python 3.11, 3.12 or 3.13" \
            "(PYTHON=/path/to/python3 sh tools/$command_name). Details: $log"
    fi
    grep -v '^ *$' "$log" | tail -n 3 >&2
    fail "pip could not install the Python packages. Details: $log"
}

# Makes sure that .venv is complete for $1 (base or test).
prepare() {
    if [ ! -e "$venv/carriersim-installing" ] && works "$python" && same_version &&
        wanted "$1" | cmp -s - "$venv/carriersim-$1"; then
        return
    fi
    trap 'say "Interrupted: the next call installs afresh." >&2; exit 130' INT TERM HUP
    make_venv
    say "installing Python packages into .venv (a few minutes at most, only this once)"
    requirements=requirements.txt
    if [ "$1" = test ]; then
        requirements=requirements-test.txt
    fi
    printf '' >"$venv/install.log"
    pip_install --only-binary :all: -r "$root/tools/$requirements"
    pip_install --no-deps --no-build-isolation --editable "$root"
    for kind in base "$1"; do
        wanted "$kind" >"$venv/carriersim-$kind" || fail "Cannot write in $venv."
    done
    rm -f -- "$venv/carriersim-installing"
    trap - INT TERM HUP
}
