#!/usr/bin/env bash
# Run the whole job on the practice district, headless, and leave maps, layers and a report to look at.
#   bash tools/demo.sh [FOLDER]            the invented district of Ostermoor (FOLDER: demo-output)
#   bash tools/demo.sh --real [FOLDER]     open data instead: deaths of 1854 in Soho, counties of North Carolina
set -euo pipefail
cd "$(dirname "$0")/.."
source tools/setup.sh

host_packages
core_environment build/environment
if [ "${1:-}" = "--real" ]; then
  shift
  build/environment/bin/python -m pip install -q --no-deps libpysal
  exec build/environment/bin/python tools/demo_open_data.py "${1:-demo-output-open-data}"
fi
exec build/environment/bin/python tools/demo.py "${1:-demo-output}"
