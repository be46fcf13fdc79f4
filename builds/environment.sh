# Sourced by builds/demo and tests/all: makes .venv with the project in it, or names what the system lacks.
# In:  $root, the working copy; $extra, the optional dependencies to install, "" or "[test]".
# Out: $venv, the environment. Quick when nothing has changed since it was made.

venv=$root/.venv
python=

say() {
    printf '%s\n' "$*" >&2
}

for candidate in python3 python3.14 python3.13 python3.12 python3.11; do
    if "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
        python=$candidate
        break
    fi
done
if [ -z "$python" ]; then
    say 'Python 3.11 or newer is missing. This line installs it on Debian and its relatives:'
    say '    apt-get install -y python3 python3-venv'
    exit 2
fi

# The stamp names everything that the environment was made from; an environment with the tests' extra serves the demo too.
stamp="$root $("$python" -c 'import sys; print(sys.version_info[:3])') $(cksum <"$root/pyproject.toml")"
stamp_file=$venv/made-from
fits() {
    [ -f "$stamp_file" ] && grep -qxF -e "$1" "$stamp_file" && "$venv/bin/python" -P -c 'import tilemap' >/dev/null 2>&1
}

if ! fits "$stamp [test]" && ! fits "$stamp $extra"; then
    if ! "$python" -c 'import ensurepip, venv' >/dev/null 2>&1; then
        say 'The venv module of Python is missing. This line installs it on Debian and its relatives:'
        say '    apt-get install -y python3 python3-venv'
        exit 2
    fi
    if ! "$venv/bin/python" -m pip --version >/dev/null 2>&1; then
        say "making $venv ..."
        "$python" -m venv --clear "$venv"
    fi
    say "installing tilemap$extra into $venv ..."
    "$venv/bin/python" -m pip install --quiet --quiet --disable-pip-version-check --editable "$root$extra"
    printf '%s\n' "$stamp $extra" >"$stamp_file"
fi
