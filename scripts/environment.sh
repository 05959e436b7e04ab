# Sourced by scripts/demo, scripts/test and .ci/run: one Python environment for all of them.
#
# ready_environment EXTRAS   makes the environment if need be and installs bendcast into it, with
#                            the extras named ("" for none); sets $env_python. An environment that
#                            is complete and made for the same pyproject.toml is used as it is.
#
# PYTHON          interpreter to use (default: the first of the usual names that is 3.11 or newer)
# BENDCAST_VENV   folder of the environment (default: .venv beside the code)

find_python() {
    local name
    for name in ${PYTHON:-python3.13 python3.12 python3.11 python3 python3.14 python}; do
        if "$name" -c 'import ensurepip, sys, venv; sys.exit(sys.version_info < (3, 11))' \
            </dev/null >/dev/null 2>&1; then
            printf '%s\n' "$name"
            return
        fi
    done
    echo "bendcast needs Python 3.11 or newer with its venv module; none found." >&2
    echo "Install one (Debian and Ubuntu: apt install python3 python3-venv), or name it:" >&2
    echo "  PYTHON=/path/to/python3 $0" >&2
    return 1
}

ready_environment() {
    local extras=$1 venv=${BENDCAST_VENV:-$root/.venv} python made wanted
    env_python=$venv/bin/python
    # Where it was installed from is part of the mark: a copied tree is installed anew.
    wanted="$root $(cksum <"$root/pyproject.toml")"
    for made in "$extras" dev test; do # dev holds test, and each holds the plain package
        [ "$extras" = dev ] && made=dev
        if [ "$(cat "$venv/installed-$made" 2>/dev/null)" = "$wanted" ] &&
            "$env_python" -I -c 'import forecast' </dev/null 2>/dev/null; then
            echo "== environment: $venv (already complete)"
            return
        fi
    done
    if ! "$env_python" -c 'import pip' </dev/null >/dev/null 2>&1; then
        python=$(find_python)
        echo "== environment: making $venv with $("$python" --version)"
        rm -rf "$venv"
        "$python" -m venv "$venv"
    fi
    echo "== environment: installing bendcast${extras:+[$extras]}; the first time takes some minutes"
    "$env_python" -m pip install --quiet --no-input --disable-pip-version-check \
        --editable "$root${extras:+[$extras]}" </dev/null
    printf '%s\n' "$wanted" >"$venv/installed-$extras"
}
