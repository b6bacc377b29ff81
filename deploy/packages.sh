# Debian packages of the project, and their installation. Sourced by demo.sh and tests/run.sh.

packages_build="g++ cmake ninja-build ccache pkg-config ca-certificates
  libboost-dev libeigen3-dev libspdlog-dev libfmt-dev libyaml-cpp-dev libsqlitecpp-dev libsqlite3-dev
  nlohmann-json3-dev libcli11-dev libsystemd-dev libhowardhinnant-date-dev libssl-dev libexpected-dev tzdata"
packages_test="doctest-dev librapidcheck-dev libbenchmark-dev binutils python3 python3-numpy python3-scipy
  python3-cvxopt r-base-core"

# install_packages PACKAGE...: installs those that are missing; asks for no answers.
install_packages() {
  local missing="" package
  for package in "$@"; do
    dpkg-query -W -f='${Status}' "$package" 2>/dev/null | grep -q 'ok installed' || missing="$missing $package"
  done
  [ -z "$missing" ] && return 0
  echo "== installing:$missing"
  local as_root=""
  if [ "$(id -u)" != 0 ]; then
    command -v sudo >/dev/null || { echo "these packages are missing and sudo is not here:$missing" >&2; return 1; }
    as_root=sudo
  fi
  $as_root apt-get update -qq
  # shellcheck disable=SC2086
  DEBIAN_FRONTEND=noninteractive $as_root apt-get install -y -qq --no-install-recommends $missing >/dev/null
}

# progress TITLE COMMAND...: says what begins and how long it took.
progress() {
  local title=$1 begun=$SECONDS
  shift
  echo "== $title"
  "$@" || { echo "== $title: FAILED after $((SECONDS - begun)) s" >&2; return 1; }
  echo "== $title: done in $((SECONDS - begun)) s"
}
