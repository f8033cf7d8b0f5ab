# Sourced by the tools, from bash: makes .venv out of pyproject.toml on first use, and again when pyproject.toml changes
# or the checkout has moved. Sets $root and $bin. Argument: the extra wanted, empty or "test". Says what it does on the
# standard error only. Two tools started at once wait for each other; one that is interrupted leaves no stamp, and the
# next begins again.
root=$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd -P)
bin="$root/.venv/bin"
wanted="${1:-}"

# What the environment was made for; a test environment serves both.
stamp() { printf '%s\n' "$root/.venv/made-for${1:+-$1}"; }
contents() { printf '%s\n' "$root" && cat "$root/pyproject.toml"; }
ready() {
    [ -x "$bin/vliwsim" ] && contents | cmp -s - "$(stamp "$wanted")"
}

fail() {
    echo "vliwsim: $1" >&2
    exit 2
}

# The first Python that is new enough, the usual one before the newest.
find_python() {
    local python
    for python in python3 python3.14 python3.13 python3.12 python3.11 python; do
        if command -v "$python" >/dev/null 2>&1 &&
            "$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))' >/dev/null 2>&1; then
            command -v "$python"
            return
        fi
    done
    return 1
}

# An environment that runs, has pip, and was made in this place can be brought up to date; any other is made afresh.
usable() {
    "$bin/python" -m pip --version >/dev/null 2>&1 || return 1
    local made
    for made in "$(stamp "")" "$(stamp test)"; do
        [ ! -s "$made" ] || [ "$(head -n 1 "$made")" = "$root" ] || [ "$(head -n 1 "$made")" = "[build-system]" ] || return 1
    done
}

make_environment() {
    local python
    echo "vliwsim: making its environment in $root/.venv, once" >&2
    if ! usable; then
        python=$(find_python) || fail "Python 3.11 or newer is needed, and none was found on PATH"
        "$python" -m venv --clear "$root/.venv" >&2 || fail "$python could not make $root/.venv (is its venv module there?)"
    fi
    rm -f "$(stamp "$wanted")"
    "$bin/python" -m pip install --quiet --disable-pip-version-check --no-input \
        --editable "$root${wanted:+[$wanted]}" >&2 </dev/null || fail "pip could not install what pyproject.toml asks for"
    # As pip does for a package that is not editable; some machines forbid Python to do it at the first import.
    "$bin/python" -m compileall -q "$root/vliwsim" >/dev/null 2>&1 || true
    local made
    for made in "" ${wanted:+"$wanted"}; do
        contents >"$(stamp "$made").new" && mv -f "$(stamp "$made").new" "$(stamp "$made")" || fail "$root/.venv cannot be written"
    done
}

if ! ready; then
    # The lock is on this script itself: no file to leave behind. Without flock two first uses at once are not guarded.
    exec 9<"$root/tools/environment.sh"
    if command -v flock >/dev/null 2>&1; then
        flock -n 9 || { echo "vliwsim: waiting for another process that makes the environment" >&2 && flock 9; }
    fi
    ready || make_environment
    exec 9<&-
fi
