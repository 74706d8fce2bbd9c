#!/usr/bin/env bash
# Makes a Debian machine ready for the container tests: an engine that answers, and a base image.
#   engine.sh            both; prints nothing when all is there
#   engine.sh base NAME  the base image alone, under this name
# Installs from Debian's packages, as root, and asks the package sources this machine has. Ends with 3 and one sentence
# where that cannot be had, so that the caller can say that the container tests were skipped.
set -euo pipefail

BASE=${COMMONFIT_BASE_IMAGE:-commonfit-base:local}

skip() {
  echo "containers: $1" >&2
  exit 3
}

have() { command -v "$1" > /dev/null 2>&1; }

# PACKAGES...: those that are not there yet.
install() {
  have apt-get || skip "no engine here, and no apt-get to install one with"
  [ "$(id -u)" = 0 ] || skip "no engine here, and installing one needs root"
  DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends "$@" > /dev/null 2>&1 && return
  apt-get update -qq > /dev/null 2>&1 || skip "the package sources of this machine do not answer"
  DEBIAN_FRONTEND=noninteractive apt-get install -y -qq --no-install-recommends "$@" > /dev/null 2>&1 ||
    skip "these packages could not be installed: $*"
}

answers() { docker version > /dev/null 2>&1; }

start_engine() {
  answers && return
  have dockerd && have docker || install docker.io iptables
  local log
  log=$(mktemp)
  setsid dockerd > "$log" 2>&1 < /dev/null &
  for _ in $(seq 60); do
    answers && return
    sleep 0.5
  done
  tail -n 5 "$log" >&2
  skip "the engine was started and does not answer"
}

# This system's Debian release, the package mirror it uses, this machine's Node with npm, and its certificate authorities.
make_base() {
  docker image inspect "$1" > /dev/null 2>&1 && return
  have debootstrap || install debootstrap
  local release mirror folder npm
  release=$(. /etc/os-release && echo "${VERSION_CODENAME:-}")
  mirror=$(apt-get indextargets --format '$(CREATED_BY) $(RELEASE) $(SITE)' |
    awk -v release="$release" '$1 == "Packages" && $2 == release { print $3; exit }')
  [ -n "$mirror" ] || skip "no package source for a base image"
  folder=$(mktemp -d)
  debootstrap --variant=minbase --include=ca-certificates,libstdc++6 "$release" "$folder" "$mirror" > "$folder.log" 2>&1 ||
    skip "the base image could not be made: $(tail -n 1 "$folder.log")"
  npm=$(dirname "$(dirname "$(readlink -f "$(command -v npm)")")")
  install_file "$(readlink -f "$(command -v node)")" "$folder/usr/local/bin/node"
  mkdir -p "$folder/usr/local/lib/node_modules"
  cp -r "$npm" "$folder/usr/local/lib/node_modules/npm"
  ln -s ../lib/node_modules/npm/bin/npm-cli.js "$folder/usr/local/bin/npm"
  ln -s ../lib/node_modules/npm/bin/npx-cli.js "$folder/usr/local/bin/npx"
  cp -L /etc/ssl/certs/ca-certificates.crt "$folder/etc/ssl/certs/ca-certificates.crt"
  rm -rf "$folder"/var/cache/apt/* "$folder"/var/lib/apt/lists/* "$folder"/usr/share/{doc,man,locale}/*
  tar -C "$folder" -c . | docker import \
    --change 'ENV NODE_EXTRA_CA_CERTS=/etc/ssl/certs/ca-certificates.crt' \
    --change 'CMD ["node"]' - "$1" > /dev/null
  rm -rf "$folder" "$folder.log"
}

install_file() { install_dir=$(dirname "$2"); mkdir -p "$install_dir"; cp "$1" "$2"; chmod 755 "$2"; }

start_engine
make_base "${2:-$BASE}"
have docker-compose || docker compose version > /dev/null 2>&1 || install docker-compose
