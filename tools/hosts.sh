#!/usr/bin/env bash
# Run the tests on the host of each Debian release, in a folder of its own: tools/hosts.sh [RELEASE ...]
#
# Needs root and debootstrap. Nothing outside build/hosts (or HOSTS_FOLDER) is changed, and a release that
# stands already is used again. PYTEST_ARGUMENTS replaces what pytest is given.
set -euo pipefail
cd "$(dirname "$0")/.."

hosts="${HOSTS_FOLDER:-build/hosts}"
read -r -a arguments <<<"${PYTEST_ARGUMENTS:-tests/numeric tests/algorithms tests/published tests/window}"
[ "$(id -u)" = 0 ] || { echo "tools/hosts.sh needs root, for debootstrap and chroot" >&2; exit 2; }
command -v debootstrap >/dev/null || { echo "tools/hosts.sh needs the package debootstrap" >&2; exit 2; }
mkdir -p "$hosts"
[ $# -gt 0 ] || set -- bookworm trixie sid

# in_release FOLDER COMMAND ...: run a command inside a release.
in_release() {
  local folder="$1"
  shift
  chroot "$folder" /usr/bin/env HOME=/root LC_ALL=C.UTF-8 PATH=/usr/local/sbin:/usr/local/bin:/usr/sbin:/usr/bin:/sbin:/bin \
    QT_QPA_PLATFORM=offscreen PYTHONDONTWRITEBYTECODE=1 "$@"
}

# make_release NAME FOLDER: the bare release, with this machine's settings for its package tools.
make_release() {
  local name="$1" folder="$2"
  if [ ! -e "$folder/.made" ]; then
    [ ! -d "$folder" ] || unmount_release "$folder"
    rm -rf --one-file-system "$folder"
    debootstrap --variant=minbase --include=ca-certificates "$name" "$folder"
    touch "$folder/.made"
  fi
  cp -a /etc/resolv.conf "$folder/etc/resolv.conf" 2>/dev/null || true
  cp -a /etc/apt/apt.conf.d/. "$folder/etc/apt/apt.conf.d/"
  cp -aL /etc/ssl/certs/ca-certificates.crt "$folder/etc/ssl/certs/ca-certificates.crt" 2>/dev/null || true
  [ ! -e /etc/pip.conf ] || cp -a /etc/pip.conf "$folder/etc/pip.conf"
  # a mirror of the moving release may lag behind the date until which its index holds
  [ "$name" != sid ] || echo 'Acquire::Check-Valid-Until "false";' >"$folder/etc/apt/apt.conf.d/99lagging-mirror"
}

# mount_release FOLDER and unmount_release FOLDER: what programs expect to find.
mount_release() {
  mountpoint -q "$1/proc" || mount -t proc proc "$1/proc"
  mountpoint -q "$1/dev" || mount -t devtmpfs dev "$1/dev"
}

unmount_release() {
  # a program that is still ending keeps a mount busy; a lazy one goes when the program does
  ! mountpoint -q "$1/dev" || umount "$1/dev" 2>/dev/null || umount --lazy "$1/dev"
  ! mountpoint -q "$1/proc" || umount "$1/proc" 2>/dev/null || umount --lazy "$1/proc"
}

# copy_checkout FOLDER: the files of the checkout, new ones among them, in place of an older copy.
copy_checkout() {
  local copy="$1/root/steadfield"
  mkdir -p "$copy"
  find "$copy" -mindepth 1 -maxdepth 1 ! -name .venv -exec rm -rf {} +
  # a file that is gone but not yet committed so is passed over
  git ls-files -z --cached --others --exclude-standard |
    tar --null -T - --ignore-failed-read --warning=no-failed-read -cf - | tar -xf - -C "$copy"
}

failed=()
for name in "$@"; do
  folder="$hosts/$name"
  make_release "$name" "$folder"
  trap 'unmount_release "$folder"' EXIT
  mount_release "$folder"
  copy_checkout "$folder"
  in_release "$folder" bash -c 'cd /root/steadfield && . tools/setup.sh && host_packages xvfb xauth imagemagick && test_environment'
  in_release "$folder" bash -c 'cd /root/steadfield && . tools/setup.sh && .venv/bin/python -c "
import sys, numpy, scipy, shapely
from qgis.core import Qgis
from qgis.PyQt.QtCore import QT_VERSION_STR
print(sys.argv[1], \"host\", Qgis.QGIS_VERSION, \"Qt\", QT_VERSION_STR, \"Python\", sys.version.split()[0],
      \"numpy\", numpy.__version__, \"scipy\", scipy.__version__, \"shapely\", shapely.__version__)" "$1"' - "$name"
  in_release "$folder" bash -c 'cd /root/steadfield && . tools/setup.sh && .venv/bin/python -m pytest "$@"' - "${arguments[@]}" ||
    failed+=("$name")
  unmount_release "$folder"
  trap - EXIT
done
[ ${#failed[@]} -eq 0 ] || { echo "tests failed on: ${failed[*]}" >&2; exit 1; }
echo "all tests passed on: $*"
