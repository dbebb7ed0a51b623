# Sourced by tools/start and tools/test: makes .venv and what it needs, once, and says what it does.

# find_python: the first Python of at least 3.11
find_python() {
    for candidate in python3 python3.14 python3.13 python3.12 python3.11; do
        if command -v "$candidate" >/dev/null 2>&1 &&
            "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            echo "$candidate"
            return
        fi
    done
    echo "driftwatch needs Python 3.11 or later; found $(python3 --version 2>/dev/null || echo none)." >&2
    echo "Install it (Debian, Ubuntu: apt-get install python3 python3-venv) and start again." >&2
    return 1
}

# make_venv EXTRAS: .venv with driftwatch and the named extras ("" or "[test]"); does nothing when it is there, the
# requirements are unchanged and the folder was not moved, so a second start needs no network
make_venv() {
    local extras=$1 python stamp wanted
    python=$(find_python) || return 1
    wanted="$(cksum <pyproject.toml) $PWD $("$python" -c 'import sys; print(sys.version)')"
    stamp=".venv/driftwatch-installed${extras//[^a-z]/-}"
    if [ -f "$stamp" ] && [ "$(cat "$stamp")" = "$wanted" ]; then
        return 0
    fi
    if ! [ -x .venv/bin/python ] || ! .venv/bin/python -m pip --version >/dev/null 2>&1; then
        echo "Making .venv ..." >&2
        if ! "$python" -m venv .venv; then
            echo "Python could not make a virtual environment (Debian, Ubuntu: apt-get install python3-venv)." >&2
            return 1
        fi
    fi
    echo "Installing driftwatch$extras into .venv (a minute or two the first time) ..." >&2
    if ! .venv/bin/python -m pip install --quiet --disable-pip-version-check --editable ".$extras"; then
        echo "The packages could not be installed; the lines above say why. With the network back, start again." >&2
        return 1
    fi
    printf '%s' "$wanted" >"$stamp"
    printf '%s' "$wanted" >.venv/driftwatch-installed # the extras only add to it
}

# system_package NAME WHY: installs a Debian package where that is allowed, else names the command; never fails
system_package() {
    local name=$1 why=$2
    if command -v dpkg-query >/dev/null 2>&1 && dpkg-query -W -f='${Status}' "$name" 2>/dev/null | grep -q 'ok installed'; then
        return 0
    fi
    if [ "$(id -u)" = 0 ] && command -v apt-get >/dev/null 2>&1; then
        echo "Installing the system package $name ($why) ..." >&2
        if { DEBIAN_FRONTEND=noninteractive apt-get install -y -q --no-install-recommends "$name" ||
            { apt-get update -q && DEBIAN_FRONTEND=noninteractive apt-get install -y -q --no-install-recommends "$name"; }; } \
            >.venv/system-packages.log 2>&1; then
            return 0
        fi
        echo "It could not be installed: see .venv/system-packages.log. What needs it is skipped by name." >&2
        return 0
    fi
    echo "Not installed: $name ($why). To have it: sudo apt-get install $name. What needs it is skipped by name." >&2
}
