#!/bin/sh
# Makes the certificates of clients in this folder: an authority, what it signed, and one of another authority.
# They serve tests alone; the keys are no secret.
set -e
cd "$(dirname "$0")"
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
forever=21260101000000Z

# The configuration of `openssl ca` in folder NAME, with these extensions of what it signs.
configure() { # NAME EXTENSIONS
  mkdir -p "$work/$1"
  : > "$work/$1/index"
  echo 01 > "$work/$1/serial"
  cat > "$work/$1/conf" <<CONF
[ca]
default_ca = own
[own]
database = $work/$1/index
serial = $work/$1/serial
new_certs_dir = $work/$1
default_md = sha256
policy = any
x509_extensions = signed
[any]
commonName = supplied
[signed]
$2
CONF
}

request() { # FOLDER KEY SUBJECT
  openssl req -new -newkey ec -pkeyopt ec_paramgen_curve:P-256 -nodes -subj "/CN=$3" \
    -keyout "$2" -out "$work/$1/request.pem" 2>/dev/null
}

authority() { # NAME COMMON_NAME
  configure "$1" "basicConstraints = critical,CA:TRUE"
  request "$1" "$work/$1-key.pem" "$2"
  openssl ca -batch -notext -selfsign -config "$work/$1/conf" -keyfile "$work/$1-key.pem" \
    -startdate 20240101000000Z -enddate $forever -in "$work/$1/request.pem" -out "$work/$1-cert.pem" 2>/dev/null
}

# NAME AUTHORITY COMMON_NAME START END [SUBJECT_ALTERNATIVE_NAMES]
client() {
  configure "$1" "basicConstraints = CA:FALSE
extendedKeyUsage = clientAuth
${6:+subjectAltName = $6}"
  request "$1" "$1-key.pem" "$3"
  openssl ca -batch -notext -config "$work/$1/conf" -cert "$work/$2-cert.pem" -keyfile "$work/$2-key.pem" \
    -startdate "$4" -enddate "$5" -in "$work/$1/request.pem" -out "$1-cert.pem" 2>/dev/null
}

authority ours "commonfit test authority"
authority other "another test authority"
cp "$work/ours-cert.pem" client-authority.pem
client client-harrowmere ours harrowmere 20240101000000Z $forever
client client-castlefen ours "a worker" 20240101000000Z $forever "DNS:castlefen,DNS:lindell-bay"
client client-analyst ours analyst 20240101000000Z $forever
client client-expired ours harrowmere 20240101000000Z 20240102000000Z
client client-future ours harrowmere 21250101000000Z $forever
client client-stranger other harrowmere 20240101000000Z $forever
