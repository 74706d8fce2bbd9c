#!/usr/bin/env bash
# Makes a Debian machine ready for the container tests: an engine that answers, and a base image.
#   engine.sh            both; prints nothing when all is there
#   engine.sh base NAME  the same, the base image under this name
# Installs from Debian's packages, as root, and asks the package sources this machine has. Ends with 3 and one sentence
# where that cannot be had, so that the caller can say that the container tests were skipped.
set -euo pipefail
export DEBIAN_FRONTEND=noninteractive

BASE=${COMMONFIT_BASE_IMAGE:-commonfit-base:local}
# What the Dockerfile's commands and Node need; what these need themselves comes with them.
BASE_PACKAGES=(dash coreutils findutils grep sed tar openssl libstdc++6)
SCRATCH=$(mktemp -d)
trap 'rm -rf "$SCRATCH"' EXIT

skip() {
  echo "containers: $1" >&2
  exit 3
}

have() { command -v "$1" > /dev/null 2>&1; }

# WHY COMMAND...: runs it, and once more with fresh lists of packages where it failed.
with_lists() {
  local why=$1
  shift
  "$@" > "$SCRATCH/apt.log" 2>&1 && return
  timeout 120 apt-get update -qq > /dev/null 2>&1 || skip "the package sources of this machine do not answer"
  "$@" > "$SCRATCH/apt.log" 2>&1 || skip "$why: $(tail -n 1 "$SCRATCH/apt.log")"
}

# PACKAGES...: those that are not there yet.
install() {
  have apt-get || skip "no engine here, and no apt-get to install one with"
  [ "$(id -u)" = 0 ] || skip "no engine here, and installing one needs root"
  with_lists "these packages could not be installed, $*" timeout 300 apt-get install -y -qq --no-install-recommends "$@"
}

answers() { timeout 10 docker version > /dev/null 2>&1; }

start_engine() {
  answers && return
  have dockerd && have docker || install docker.io iptables
  # a package may have started one
  for _ in 1 2 3; do answers && return || sleep 0.5; done
  [ "$(id -u)" = 0 ] || skip "no engine answers here, and starting one needs root"
  setsid dockerd > /var/log/commonfit-engine.log 2>&1 < /dev/null &
  for _ in $(seq 60); do
    answers && return
    sleep 0.5
  done
  skip "the engine was started and does not answer: $(tail -n 1 /var/log/commonfit-engine.log)"
}

# This machine's Debian packages, laid out without their installation scripts, with its Node, npm and certificate authorities.
make_base() {
  docker image inspect "$1" > /dev/null 2>&1 && return
  have apt-get || skip "there is no base image $1, and no apt-get to make one with"
  local packages=$SCRATCH/packages root=$SCRATCH/root npm
  mkdir -p "$packages/partial" "$root"/{usr/{bin,sbin,lib,lib64,local/bin,local/lib/node_modules},etc/ssl/certs,dev,proc,sys,run,root,var,tmp}
  # with nothing counted as installed, a download brings everything that is needed
  : > "$packages/installed"
  with_lists "the packages of a base image could not be had" timeout 120 apt-get install -y -qq --no-install-recommends \
    --download-only -o Dir::State::status="$packages/installed" -o Dir::Cache::archives="$packages" \
    -o APT::Sandbox::User=root "${BASE_PACKAGES[@]}"
  for folder in bin sbin lib lib64; do ln -s "usr/$folder" "$root/$folder"; done
  for package in "$packages"/*.deb; do
    dpkg-deb --fsys-tarfile "$package" | tar -x --keep-directory-symlink -C "$root"
  done
  find "$root"/usr/share/{doc,man,info,locale} -type f ! -name copyright -delete 2> /dev/null || true
  [ -e "$root/bin/sh" ] || ln -s dash "$root/bin/sh"
  chmod 1777 "$root/tmp"
  printf 'root:x:0:0:root:/root:/bin/sh\n' > "$root/etc/passwd"
  printf 'root:x:0:\n' > "$root/etc/group"
  npm=$(dirname "$(dirname "$(readlink -f "$(command -v npm)")")")
  install_program node "$root"
  cp -r "$npm" "$root/usr/local/lib/node_modules/npm"
  ln -s ../lib/node_modules/npm/bin/npm-cli.js "$root/usr/local/bin/npm"
  ln -s ../lib/node_modules/npm/bin/npx-cli.js "$root/usr/local/bin/npx"
  cp -L /etc/ssl/certs/ca-certificates.crt "$root/etc/ssl/certs/ca-certificates.crt"
  tar -C "$root" -c . | timeout 120 docker import --change 'ENV NODE_EXTRA_CA_CERTS=/etc/ssl/certs/ca-certificates.crt' \
    --change 'CMD ["node"]' - "$1" > /dev/null || skip "the engine does not take a base image"
}

install_program() {
  cp "$(readlink -f "$(command -v "$1")")" "$2/usr/local/bin/$1"
  chmod 755 "$2/usr/local/bin/$1"
}

start_engine
make_base "${2:-$BASE}"
timeout 60 docker run --rm --read-only --cap-drop ALL --network none "${2:-$BASE}" node -e '' > /dev/null 2>&1 ||
  skip "the engine answers, and runs no container"
have docker-compose || timeout 20 docker compose version > /dev/null 2>&1 || install docker-compose
