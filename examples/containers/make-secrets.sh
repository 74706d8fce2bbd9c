#!/bin/sh
# Makes a certificate authority of one's own and the coordinator's certificate, with openssl.
#   make-secrets.sh FOLDER NAME...   names under which workers and analysts reach the coordinator; addresses as IP:192.0.2.7
# FOLDER/ca.pem goes to every custodian and analyst, FOLDER/chain.pem and key.pem to the coordinator. FOLDER/ca.key signs:
# keep it off line. Existing files are left alone.
set -eu
[ $# -ge 2 ] || { echo "usage: make-secrets.sh FOLDER NAME..." >&2; exit 2; }
folder=$1
shift
names=DNS:localhost
for name in "$@"; do
  case $name in *:*) names=$names,$name ;; *) names=$names,DNS:$name ;; esac
done
[ ! -e "$folder/key.pem" ] || { echo "$folder/key.pem is there already; nothing was made." >&2; exit 1; }
mkdir -p "$folder"
umask 077
openssl req -x509 -newkey ec -pkeyopt ec_paramgen_curve:P-256 -nodes -days 3650 -subj "/CN=commonfit authority" \
  -addext "keyUsage=critical,keyCertSign,cRLSign" -keyout "$folder/ca.key" -out "$folder/ca.pem" 2> /dev/null
openssl req -newkey ec -pkeyopt ec_paramgen_curve:P-256 -nodes -subj "/CN=commonfit coordinator" \
  -keyout "$folder/key.pem" -out "$folder/request.pem" 2> /dev/null
printf 'subjectAltName=%s\nextendedKeyUsage=serverAuth\n' "$names" > "$folder/extensions"
openssl x509 -req -in "$folder/request.pem" -CA "$folder/ca.pem" -CAkey "$folder/ca.key" -CAcreateserial -days 825 \
  -extfile "$folder/extensions" -out "$folder/chain.pem" 2> /dev/null
rm "$folder/request.pem" "$folder/extensions"
chmod 644 "$folder/ca.pem" "$folder/chain.pem"
