ARG BASE=debian:bookworm-slim
FROM ${BASE} AS build
RUN apt-get update -q \
    && apt-get install -y -q --no-install-recommends make gcc libc6-dev gzip libmicrohttpd-dev \
        libsqlite3-dev libjansson-dev libcfitsio-dev libsodium-dev libgsl-dev libarchive-dev \
        libcurl4-openssl-dev libunistring-dev zlib1g-dev \
    && rm -rf /var/lib/apt/lists/*
COPY Makefile /source/
COPY include /source/include
COPY server /source/server
COPY migrations /source/migrations
COPY web /source/web
RUN make -C /source -j2 build

ARG BASE=debian:bookworm-slim
FROM ${BASE}
RUN apt-get update -q \
    && apt-get install -y -q --no-install-recommends libmicrohttpd12 libsqlite3-0 libjansson4 \
        libcfitsio10 libsodium23 libgsl27 libarchive13 libcurl4 libunistring2 zlib1g curl \
    && rm -rf /var/lib/apt/lists/* \
    && useradd --system --uid 10001 --home-dir /data --shell /usr/sbin/nologin ebbmark \
    && mkdir /data && chown ebbmark:ebbmark /data
COPY --from=build /source/build/release/ebbmark /usr/local/bin/ebbmark
USER ebbmark
WORKDIR /data
VOLUME /data
EXPOSE 8080
HEALTHCHECK --interval=30s --timeout=5s --start-period=10s \
    CMD curl -fsS http://127.0.0.1:8080/healthz || exit 1
ENTRYPOINT ["/usr/local/bin/ebbmark"]
CMD ["serve", "--database", "/data/campaign.db", "--listen", "0.0.0.0:8080"]
