ARG BASE_IMAGE=python:3.11-slim

# --- build: a virtual environment with the locked dependencies and the service
FROM ${BASE_IMAGE} AS build
ENV PIP_DISABLE_PIP_VERSION_CHECK=1 PIP_NO_CACHE_DIR=1 PYTHONDONTWRITEBYTECODE=1
RUN python3 -m venv /venv
WORKDIR /source
COPY requirements.lock ./
# wheels only: nothing here needs a compiler
RUN /venv/bin/pip install --only-binary :all: --require-hashes -r requirements.lock
COPY pyproject.toml README.md ./
COPY service service
COPY schemas schemas
RUN /venv/bin/pip install --no-deps --no-build-isolation .
# what only installing and testing need
RUN /venv/bin/pip uninstall --yes --quiet setuptools pip \
    && find /venv/lib -type d -name tests -prune -exec rm -rf {} +
RUN /venv/bin/loiterwise --version && /venv/bin/python3 -m compileall -q /venv/lib

# --- run: the same base, that environment, an account without rights
FROM ${BASE_IMAGE}
# everyone may write to /data: whatever is mounted there (a tmpfs takes over the mode, but not the owner)
RUN useradd --uid 10001 --no-create-home --home-dir /nonexistent --shell /usr/sbin/nologin loiterwise \
    && mkdir --mode 1777 /data && chown 10001:10001 /data
COPY --from=build /venv /venv
ENV PATH=/venv/bin:$PATH \
    PYTHONUNBUFFERED=1 \
    PYTHONDONTWRITEBYTECODE=1 \
    LOITERWISE_DATA=/data \
    LOITERWISE_BIND=0.0.0.0 \
    LOITERWISE_ACCESS=keys \
    PORT=8000
USER 10001:10001
WORKDIR /data
VOLUME /data
EXPOSE 8000
HEALTHCHECK --interval=30s --timeout=5s --start-period=20s --retries=3 \
    CMD ["python3", "-c", "import os, urllib.request; urllib.request.urlopen('http://127.0.0.1:' + os.environ['PORT'] + '/v1/health/live', timeout=4)"]
CMD ["loiterwise", "serve"]
