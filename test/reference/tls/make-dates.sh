#!/bin/sh
# Certificates of the loopback address whose dates are wrong: one of the next century, one whose authority has expired.
set -eu
here=$(cd "$(dirname "$0")" && pwd)
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
cd "$work"
cat >ca.cnf <<'CNF'
[ca]
default_ca=d
[d]
database=index.txt
serial=serial
new_certs_dir=.
default_md=sha256
policy=p
unique_subject=no
[p]
commonName=supplied
[root]
basicConstraints=critical,CA:TRUE
subjectKeyIdentifier=hash
[leaf]
subjectAltName=IP:127.0.0.1
CNF
: >index.txt
echo 01 >serial
ask() {
  openssl ecparam -name prime256v1 -genkey -noout | openssl pkcs8 -topk8 -nocrypt -out "$1-key.pem"
  openssl req -new -key "$1-key.pem" -subj "/CN=commonfit $2 test" -out "$1.csr"
}
sign() {
  openssl ca -batch -notext -config ca.cnf -in "$1.csr" -startdate "$2" -enddate "$3" -extensions "$4" -out "$5" $6
}
ask future 'not yet valid'
sign future 21200101000000Z 21230101000000Z leaf "$here/future-cert.pem" '-selfsign -keyfile future-key.pem'
ask authority 'lapsed authority'
sign authority 20230101000000Z 20240101000000Z root "$here/lapsed-authority.pem" '-selfsign -keyfile authority-key.pem'
ask lapsed 'of a lapsed authority'
sign lapsed 20240101000000Z 21230101000000Z leaf "$here/lapsed-cert.pem" \
  "-cert $here/lapsed-authority.pem -keyfile authority-key.pem"
cp future-key.pem lapsed-key.pem "$here"
