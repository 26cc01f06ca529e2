#!/bin/sh
# Sets duskcheck up in this checkout and runs a year of evenings of the invented firm. Safe to repeat.
# usage: sh deploy/demo.sh
cd "$(dirname "$0")/.." || exit 2
set --
. deploy/venv.sh
rm -rf demo_site
exec .venv/bin/duskcheck demo demo_site
