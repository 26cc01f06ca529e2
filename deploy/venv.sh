# Sourced by demo.sh and test.sh from the checkout: a virtual environment in .venv with duskcheck installed in it.
# usage: . deploy/venv.sh [EXTRA]      EXTRA: the name of an optional set of packages, as test
set -eu

wanted=".${1:+[$1]}"
python=${PYTHON:-python3}

if ! command -v "$python" >/dev/null 2>&1; then
    echo "duskcheck needs Python 3.11 or newer, and there is no $python here. On Debian: apt-get install python3 python3-venv" >&2
    exit 2
fi
if ! "$python" -c 'import sys; sys.exit(sys.version_info < (3, 11))'; then
    echo "duskcheck needs Python 3.11 or newer; $python is $("$python" -V 2>&1). Name a newer one: PYTHON=python3.12 sh $0" >&2
    exit 2
fi
if ! "$python" -c 'import ensurepip, venv' 2>/dev/null; then
    echo "duskcheck needs Python's venv module, and $python has none. On Debian: apt-get install python3-venv" >&2
    exit 2
fi

[ -x .venv/bin/python ] || "$python" -m venv .venv
# Installed again only when the packages it needs have changed since.
if ! cmp -s pyproject.toml ".venv/installed${1:+-$1}"; then
    echo "Installing duskcheck and the packages it needs into .venv ..."
    .venv/bin/python -m pip install --quiet --disable-pip-version-check --editable "$wanted"
    cp pyproject.toml ".venv/installed${1:+-$1}"
fi
