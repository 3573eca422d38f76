#!/usr/bin/env bash
# Installs what the build needs from Debian's packages, and packages named as arguments. Quiet when
# all is present; without root it says what to install and stops.
set -euo pipefail

needs=(
  g++ cmake ninja-build ccache
  libeigen3-dev libboost-dev libboost-iostreams-dev libfccp-dev libcli11-dev
  libtomlplusplus-dev nlohmann-json3-dev libfmt-dev libtbb-dev libhwy-dev
  libhowardhinnant-date-dev libssl-dev libsqlite3-dev libgtest-dev libbenchmark-dev tzdata
  node-d3
  "$@"
)
missing=()
for package in "${needs[@]}"; do
  dpkg-query -W -f='${Status}' "$package" 2>/dev/null | grep -q '^install ok installed' ||
    missing+=("$package")
done
[ ${#missing[@]} -gt 0 ] || exit 0

as_root=()
if [ "$(id -u)" -ne 0 ]; then
  if command -v sudo >/dev/null; then as_root=(sudo); else
    echo "Install these packages first, then run this again:" >&2
    echo "  apt-get install ${missing[*]}" >&2
    exit 1
  fi
fi
echo "installing: ${missing[*]}" >&2
export DEBIAN_FRONTEND=noninteractive
"${as_root[@]}" apt-get update -qq >/dev/null
"${as_root[@]}" apt-get install -y -qq --no-install-recommends "${missing[@]}" >/dev/null
