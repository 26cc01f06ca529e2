#!/bin/sh
# Installs what the tests need into this checkout's .venv and runs them all. Safe to repeat.
# usage: sh deploy/test.sh [PYTEST OPTIONS]
cd "$(dirname "$0")/.." || exit 2
options="$*"
set --
set -- test
. deploy/venv.sh
# shellcheck disable=SC2086
exec .venv/bin/python -m pytest -n auto --dist loadfile $options
