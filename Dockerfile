# Two images: `coordinator` and `worker`; a third, `setup`, makes what the demo in docker-compose.yml needs.
#
#   docker build --target coordinator --tag commonfit-coordinator .
#   docker build --target worker --tag commonfit-worker .
#
# BASE: any image of a Linux with glibc that has Node 20.15 or later, npm and a shell.
ARG BASE=node:20-bookworm-slim

FROM ${BASE} AS build
WORKDIR /build
COPY . .
# What each image holds, under /images. Tables are read by workers alone: the coordinator has no table reader. One layer, so
# that what only the build needs is not kept.
RUN npm ci --no-audit --no-fund --cache /tmp/npm \
  && npm run build && find dist -name "*.map" -delete && npm prune --omit=dev --no-audit --no-fund --cache /tmp/npm \
  && for image in coordinator worker; do \
    app=/images/$image; \
    mkdir -p $app/dist $app/protocol && cp -r node_modules package.json LICENSE README.md SECURITY.md $app/ \
    && cp protocol/README.md protocol/messages.cddl $app/protocol/ && cp examples/containers/health.sh $app/ \
    && cp -r dist/protocol dist/numerics dist/$image $app/dist/ && chmod 755 $app/dist/$image/main.js || exit 1; \
  done \
  && rm -rf /images/coordinator/node_modules/@duckdb \
  && for image in coordinator worker; do \
    node examples/containers/third-party.mjs /images/$image/node_modules > /images/$image/THIRD-PARTY || exit 1; \
  done \
  && rm -rf node_modules /tmp/npm
# What every process of ours runs as. Its folders belong to it, wherever a volume is mounted over them later.
RUN mkdir -p /owned/state /owned/site /owned/table && chown -R 10001:10001 /owned

FROM ${BASE} AS coordinator
LABEL org.opencontainers.image.title="commonfit coordinator" org.opencontainers.image.licenses="Apache-2.0"
ENV NODE_ENV=production COMMONFIT_URL=https://localhost:7443
COPY --from=build /images/coordinator /app
RUN ln -s /app/dist/coordinator/main.js /usr/local/bin/commonfit
COPY --from=build --chown=10001:10001 /owned/state /state
USER 10001:10001
WORKDIR /state
VOLUME /state
EXPOSE 7443
STOPSIGNAL SIGTERM
HEALTHCHECK --interval=1s --timeout=30s --start-period=20s --retries=8 CMD ["sh", "/app/health.sh", "commonfit", "health"]
ENTRYPOINT ["node", "/app/dist/coordinator/main.js"]
CMD ["serve", "--listen", "0.0.0.0:7443", "--state", "/state", "--log", "plain", "--tls-cert", "/run/secrets/chain.pem", "--tls-key", "/run/secrets/key.pem"]

FROM ${BASE} AS worker
LABEL org.opencontainers.image.title="commonfit worker" org.opencontainers.image.licenses="Apache-2.0"
ENV NODE_ENV=production COMMONFIT_HEARTBEAT_FILE=/tmp/heartbeat
COPY --from=build /images/worker /app
RUN ln -s /app/dist/worker/main.js /usr/local/bin/commonfit-worker
COPY --from=build --chown=10001:10001 /owned/site /site
COPY --from=build --chown=10001:10001 /owned/table /table
USER 10001:10001
WORKDIR /site
VOLUME /site
STOPSIGNAL SIGTERM
HEALTHCHECK --interval=1s --timeout=30s --start-period=20s --retries=8 CMD ["sh", "/app/health.sh", "commonfit-worker", "health"]
ENTRYPOINT ["node", "/app/dist/worker/main.js"]
CMD ["join", "/site/site.yaml"]

FROM worker AS setup
USER 0:0
RUN command -v openssl > /dev/null || (apt-get update -qq && apt-get install -y -qq --no-install-recommends openssl && rm -rf /var/lib/apt/lists/*)
COPY --from=build /build/dist/coordinator /app/dist/coordinator
COPY --from=build /build/dist/examples /app/dist/examples
COPY examples/containers/set-up.sh examples/containers/make-secrets.sh /app/
RUN for place in state analyst/secrets analyst/fit coordinator/secrets; do mkdir -p "/made/$place"; done \
  && for site in harrowmere lindell-bay castlefen oakhythe; do mkdir -p "/made/$site/secrets" "/made/$site/site" "/made/$site/table"; done \
  && chown -R 10001:10001 /made
USER 10001:10001
WORKDIR /tmp
HEALTHCHECK NONE
ENTRYPOINT ["sh", "/app/set-up.sh"]
CMD []
