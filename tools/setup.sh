# Shared by the tools: installs the host application and makes the Python environments.

export QT_QPA_PLATFORM="${QT_QPA_PLATFORM:-offscreen}"
if [ -z "${XDG_RUNTIME_DIR:-}" ] || [ ! -d "${XDG_RUNTIME_DIR}" ]; then
  XDG_RUNTIME_DIR="$(mktemp -d)"
  chmod 700 "$XDG_RUNTIME_DIR"
  export XDG_RUNTIME_DIR
fi

# host_packages [PACKAGE ...]: the host and what is named, installed where missing.
host_packages() {
  local wanted=(qgis python3-qgis qgis-providers python3-scipy python3-matplotlib python3-venv "$@")
  local missing=()
  for package in "${wanted[@]}"; do
    dpkg-query -W -f '${Status}' "$package" 2>/dev/null | grep -q 'ok installed' || missing+=("$package")
  done
  if [ ${#missing[@]} -gt 0 ]; then
    local as_root=""
    [ "$(id -u)" = 0 ] || as_root="sudo"
    $as_root apt-get update -q
    DEBIAN_FRONTEND=noninteractive $as_root apt-get install -y -q --no-install-recommends "${missing[@]}"
  fi
}

# core_packages FOLDER: an environment that sees the host, with numpy and shapely in the versions it takes.
core_environment() {
  local folder="$1"
  [ -x "$folder/bin/python" ] || /usr/bin/python3 -m venv --system-site-packages "$folder"
  if ! "$folder/bin/python" -c 'import shapely; assert shapely.__version__ >= "2"' 2>/dev/null; then
    local pins=("shapely>=2")
    # scipy of Debian 12 was built for numpy 1
    if "$folder/bin/python" -c 'import numpy; raise SystemExit(numpy.__version__ >= "2")'; then
      pins=("numpy<1.27" "shapely>=2,<2.1")
    fi
    "$folder/bin/python" -m pip install -q "${pins[@]}"
  fi
}

# test_environment: .venv with the packages that only the tests use.
test_environment() {
  core_environment .venv
  local stamp=.venv/.test-packages
  if ! cmp -s tools/test-requirements.txt "$stamp"; then
    local pins=()
    if .venv/bin/python -c 'import numpy; raise SystemExit(numpy.__version__ >= "2")'; then
      pins=("numpy<1.27" "shapely>=2,<2.1")
    fi
    .venv/bin/python -m pip install -q -r tools/test-requirements.txt "${pins[@]}"
    .venv/bin/python -m pip install -q --no-deps libpysal
    cp tools/test-requirements.txt "$stamp"
  fi
}
