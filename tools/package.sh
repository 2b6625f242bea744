#!/usr/bin/env bash
# Build build/steadfield-VERSION.zip, ready to install from the host's plugin manager.
set -euo pipefail
cd "$(dirname "$0")/.."
exec python3 tools/package.py "$@"
