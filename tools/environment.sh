# Sourced by the tools: makes .venv from pyproject.toml on first use and again whenever pyproject.toml changes.
# Sets $root and $bin. Extras wanted: $1 (empty, or "test").
root=$(cd "$(dirname "${BASH_SOURCE[0]}")/.." && pwd)
bin="$root/.venv/bin"
wanted="${1:-}"
stamp="$root/.venv/made-for${wanted:+-$wanted}"
# 3.11 or newer; the first of these that is there
make_environment() {
    local python
    for python in python3 python3.13 python3.12 python3.11; do
        if command -v "$python" >/dev/null && "$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            [ -x "$bin/python" ] || "$python" -m venv "$root/.venv" || exit 2
            "$bin/python" -m pip install --quiet --disable-pip-version-check --editable "$root${wanted:+[$wanted]}" >&2 || exit 2
            cp "$root/pyproject.toml" "$stamp"
            return
        fi
    done
    echo "vliwsim needs Python 3.11 or newer; none was found on PATH" >&2
    exit 2
}
cmp -s "$root/pyproject.toml" "$stamp" || {
    echo "making the environment in $root/.venv (first use)" >&2
    make_environment
}
