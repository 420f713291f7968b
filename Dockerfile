# Build: needs nothing from the network but the two base images and the crates of Cargo.lock.
FROM rust:1.95-slim-bookworm AS build
WORKDIR /src
COPY . .
RUN cargo build --release --locked --bin tailcast

# Run: the binary, a user of its own, a folder for the database.
FROM debian:bookworm-slim
RUN useradd --system --uid 10001 --create-home --home-dir /var/lib/tailcast tailcast
COPY --from=build /src/target/release/tailcast /usr/local/bin/tailcast
USER tailcast
WORKDIR /var/lib/tailcast
VOLUME /var/lib/tailcast
# Inside a container loopback is reachable from nowhere, and elsewhere keys are asked for: docker exec … tailcast keys create NAME
ENV TAILCAST_BIND=0.0.0.0:8080 TAILCAST_ACCESS_KEYS=required
EXPOSE 8080
HEALTHCHECK --interval=10s --timeout=5s --start-period=5s CMD ["tailcast", "check"]
ENTRYPOINT ["tailcast"]
CMD ["serve"]
