# Build: needs nothing from the network but the base image and the crates of Cargo.lock. packaging/prove makes the same steps without
# a container engine.
FROM rust:1.95.0-slim-bookworm AS build
WORKDIR /src
COPY . .
RUN cargo build --release --locked --bin tailcast
RUN packaging/rootfs target/release/tailcast /rootfs

# Run: the program, the libraries it names, and a folder for data; no shell, no package manager.
FROM scratch
COPY --from=build /rootfs /
USER 10001:10001
WORKDIR /var/lib/tailcast
# All that is written. The root may be read-only: docker run --read-only -v tailcast:/var/lib/tailcast …
VOLUME /var/lib/tailcast
# Inside a container loopback is reachable from nowhere, and elsewhere keys are asked for: docker exec … tailcast keys create NAME
ENV TAILCAST_BIND=0.0.0.0:8080 TAILCAST_ACCESS_KEYS=required
EXPOSE 8080
STOPSIGNAL SIGTERM
HEALTHCHECK --interval=10s --timeout=5s --start-period=10s CMD ["/usr/local/bin/tailcast", "check"]
ENTRYPOINT ["/usr/local/bin/tailcast"]
CMD ["serve"]
