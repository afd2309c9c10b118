# Sourced by up.sh and check.sh, from the repository's root: make_environment FOLDER EXTRA

find_python() {
    for python in ${PYTHON:-} python3 python3.13 python3.12 python3.11 python3.14; do
        if command -v "$python" >/dev/null 2>&1 &&
            "$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            return
        fi
    done
    echo "Tallyward needs Python 3.11 or later, and none was found on PATH." >&2
    echo "On Debian 12 or Ubuntu 24.04: apt install python3 python3-venv" >&2
    exit 1
}

make_environment() {
    folder=$1
    extra=$2
    # A copied or moved environment points to a Python or a folder that is not there any more.
    if ! "$folder/bin/python" -m pip --version >/dev/null 2>&1; then
        find_python
        if ! "$python" -c 'import ensurepip, venv' 2>/dev/null; then
            version=$("$python" -c 'import sys; print("%d.%d" % sys.version_info[:2])')
            echo "$python cannot make environments: ensurepip is missing." >&2
            echo "On Debian or Ubuntu: apt install python$version-venv" >&2
            exit 1
        fi
        echo "Making $folder with $("$python" --version) ..."
        "$python" -m venv --clear "$folder"
    fi
    # The editable install holds this folder's path, so a moved copy must install again.
    stamp="$(pwd) $extra $(cksum <pyproject.toml)"
    if [ "$stamp" != "$(cat "$folder/tallyward-installed" 2>/dev/null)" ]; then
        echo "Installing what Tallyward needs into $folder ..."
        "$folder/bin/python" -m pip install --quiet --disable-pip-version-check -e ".[$extra]"
        printf '%s\n' "$stamp" >"$folder/tallyward-installed"
    fi
}
