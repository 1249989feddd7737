# The base can be replaced: give its digest (python:3.13-slim@sha256:…) for a build that is the same every time.
# None is written here because a digest that nobody has looked up would be worse than a tag.
ARG BASE=python:3.13-slim

# hadolint ignore=DL3006
FROM ${BASE} AS build
WORKDIR /build
RUN python3 -m venv /opt/tailrace
ENV PATH=/opt/tailrace/bin:$PATH
COPY requirements.lock ./
RUN python3 -m pip install --no-cache-dir --only-binary :all: --require-hashes -r requirements.lock
COPY pyproject.toml README.md LICENSE ./
COPY service service
RUN python3 -m pip wheel --no-cache-dir --no-deps --wheel-dir dist . \
    && python3 -m pip install --no-cache-dir --no-deps dist/*.whl \
    && python3 -m pip check \
    && python3 -m pip uninstall --yes pip

# hadolint ignore=DL3006
FROM ${BASE}
LABEL org.opencontainers.image.title="tailrace" \
      org.opencontainers.image.description="Loss scenarios in, risk measures and capital allocations out" \
      org.opencontainers.image.licenses="Apache-2.0"
COPY --from=build /opt/tailrace /opt/tailrace
# Linear algebra on one thread: TAILRACE_THREADS says how many threads compute. Nothing is written outside the
# temporary folder, so the root file system may be read-only.
ENV PATH=/opt/tailrace/bin:$PATH \
    PYTHONUNBUFFERED=1 \
    PYTHONDONTWRITEBYTECODE=1 \
    OMP_NUM_THREADS=1 \
    OPENBLAS_NUM_THREADS=1 \
    TAILRACE_HOST=0.0.0.0 \
    TAILRACE_PORT=8000
WORKDIR /tmp
USER 10001:10001
EXPOSE 8000
STOPSIGNAL SIGTERM
HEALTHCHECK --interval=10s --timeout=3s --start-period=20s --retries=3 \
    CMD ["python3", "-c", "import os, urllib.request as u; u.urlopen(f'http://127.0.0.1:{os.environ[\"TAILRACE_PORT\"]}/healthz', timeout=2)"]
CMD ["tailrace", "serve"]
