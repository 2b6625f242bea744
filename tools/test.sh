#!/usr/bin/env bash
# Set up what the tests need on a Debian machine and run them all; arguments go to pytest.
set -euo pipefail
cd "$(dirname "$0")/.."
source tools/setup.sh

host_packages xvfb xauth imagemagick
test_environment
.venv/bin/ruff check .
.venv/bin/ruff format --check .
.venv/bin/python -m pytest "$@"
