# Stillwell in a container: one static binary, no shell, no privileges.
#
#   docker build -t stillwell .
#   docker run --rm stillwell demo --listen ''
#   docker run -d --name stillwell --stop-timeout 60 \
#     -v "$PWD/harbour.yaml:/etc/stillwell/study.yaml:ro" -v stillwell:/var/lib/stillwell \
#     -p 127.0.0.1:9464:9464 stillwell
#
# Paths in a study file start from its own folder, which is read-only here. So it says
#
#   state: {dir: /var/lib/stillwell/state}
#   sinks:
#     file: {path: /var/lib/stillwell/readings.jsonl}
#     prometheus: {listen: 0.0.0.0:9464}     # inside the container; -p above decides who reaches it
#
# A folder of the host in place of the named volume must belong to user 65532.

FROM golang:1.26-bookworm AS build
WORKDIR /src
COPY go.mod go.sum ./
RUN go mod download
COPY . .
RUN CGO_ENABLED=0 go build -trimpath -ldflags=-s -o /out/stillwell ./cmd/stillwell

# What HEALTHCHECK runs. The image has no shell and no client, and the program no command that
# asks itself: `stillwell show` would read the whole state each time, and be content with one
# that a dead daemon left.
COPY <<'EOF' /probe/main.go
package main

import (
	"net/http"
	"os"
	"time"
)

func main() {
	client := http.Client{Timeout: 3 * time.Second}
	r, err := client.Get(os.Args[1])
	if err != nil || r.StatusCode != http.StatusOK {
		os.Exit(1)
	}
}
EOF
RUN CGO_ENABLED=0 go build -trimpath -ldflags=-s -o /out/probe /probe/main.go
RUN mkdir /out/data

# Certificate authorities (for Kafka over TLS) and an unprivileged user, nothing else.
FROM gcr.io/distroless/static-debian12:nonroot
COPY --from=build /out/stillwell /out/probe /
COPY --from=build /src/LICENSE /LICENSE
COPY --from=build --chown=65532:65532 /out/data /var/lib/stillwell
USER 65532:65532
VOLUME /var/lib/stillwell
EXPOSE 9464

# /healthz answers while the daemon is alive, also while it waits for a broker: starting it anew
# would not help with that. A study file without the prometheus sink, or with another port, has
# nothing to ask here: run it with --no-healthcheck.
HEALTHCHECK --interval=30s --timeout=5s --start-period=30s CMD ["/probe", "http://127.0.0.1:9464/healthz"]

# SIGTERM leaves a checkpoint; give a large state the time for it (--stop-timeout).
ENTRYPOINT ["/stillwell"]
CMD ["run", "/etc/stillwell/study.yaml"]
