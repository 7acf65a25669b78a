# Sourced by demo.sh and test.sh: installs what is missing, by name, and nothing else.

need_packages() {
  local missing=()
  local package
  for package in "$@"; do
    dpkg-query -W -f='${db:Status-Status}' "$package" 2>/dev/null | grep -qx installed || missing+=("$package")
  done
  if [ ${#missing[@]} -eq 0 ]; then return 0; fi
  echo "installing: ${missing[*]}" >&2
  local as_root=()
  if [ "$(id -u)" -ne 0 ]; then as_root=(sudo); fi
  "${as_root[@]}" apt-get update -q >&2
  "${as_root[@]}" env DEBIAN_FRONTEND=noninteractive apt-get install -y -q --no-install-recommends "${missing[@]}" >&2
}

build_packages=(g++-12 cmake ninja-build pkg-config libasio-dev libeigen3-dev libspdlog-dev libfmt-dev libprotobuf-dev
                protobuf-compiler libcli11-dev zlib1g-dev libsystemd-dev)
