#!/bin/sh
# Run Tallyward with the demo on this machine: make an environment if there is none, then serve.
# Ctrl-C ends it. Safe to run again: environment, data and demo are used again.
set -eu
cd "$(dirname "$0")/.."
. deploy/environment.sh
make_environment .venv embedded
exec .venv/bin/python -P -m service.cli serve --demo
