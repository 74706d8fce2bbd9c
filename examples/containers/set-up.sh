#!/bin/sh
# In the image `setup`: makes what the demo's services need, each in a volume of its own, once: the invented tables and site
# files, an authority and the coordinator's certificate, tokens, and each custodian's approval. Everything under /made.
set -eu
sites="harrowmere lindell-bay castlefen oakhythe"
[ ! -e /made/analyst/fit/ready ] || { echo "Everything is there already."; exit 0; }
umask 077
work=$(mktemp -d)

node /app/dist/examples/pipe-breaks/generate.js --out "$work" --url wss://coordinator:7443
rm -f /made/coordinator/secrets/*
sh /app/make-secrets.sh "$work/keys" coordinator
cp "$work/keys/chain.pem" "$work/keys/key.pem" "$work/keys/ca.pem" /made/coordinator/secrets/

admit() {
  node /app/dist/coordinator/main.js admit "$@" --state /made/state
}

for site in $sites; do
  table=$(cd "$work" && ls "$site.csv" "$site.parquet" "$site.jsonl" 2> /dev/null || true)
  cp "$work/$table" "/made/$site/table/$table"
  sed -e "s#\./$site\.token}#/run/secrets/token, ca-file: /run/secrets/ca.pem}#" -e "s#\./$table#/table/$table#" \
    "$work/$site.site.yaml" > "/made/$site/site/site.yaml"
  rm -f "/made/$site/secrets/"*
  admit "$site" --out "/made/$site/secrets/token"
  cp "$work/keys/ca.pem" "/made/$site/secrets/ca.pem"
  node /app/dist/worker/main.js approve "/made/$site/site/site.yaml" "$work/breaks.fit.yaml"
done

rm -f /made/analyst/secrets/*
admit --analyst analyst --out /made/analyst/secrets/token
cp "$work/keys/ca.pem" /made/analyst/secrets/ca.pem
cp "$work/breaks.fit.yaml" /made/analyst/fit/
touch /made/analyst/fit/ready
rm -rf "$work"
