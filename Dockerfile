# One image for `bidkeel serve` and for every other command of the service.
# What is needed to build stays in the first stage; the second one holds Python and the service.
FROM python:3.11-slim AS build
WORKDIR /src
COPY pyproject.toml README.md LICENSE ./
COPY deploy/constraints.txt deploy/constraints.txt
COPY service service
COPY migrations migrations
RUN python -m venv /opt/bidkeel
RUN PIP_CONSTRAINT=deploy/constraints.txt /opt/bidkeel/bin/pip install --no-cache-dir setuptools
RUN PIP_CONSTRAINT=deploy/constraints.txt /opt/bidkeel/bin/pip install --no-cache-dir --no-build-isolation ".[traces]"
RUN /opt/bidkeel/bin/pip uninstall --yes setuptools pip

FROM python:3.11-slim
RUN useradd --no-create-home --uid 10001 bidkeel && install -d -o bidkeel -g bidkeel /data
COPY --from=build /opt/bidkeel /opt/bidkeel

USER 10001:10001
WORKDIR /data
# Inside a container the loopback address is reachable by nobody; publish the port with care.
# Nothing is written but below /data, so the rest of the file system may be read-only.
ENV PATH=/opt/bidkeel/bin:$PATH \
    PYTHONDONTWRITEBYTECODE=1 \
    PYTHONUNBUFFERED=1 \
    BIDKEEL_HOST=0.0.0.0 \
    BIDKEEL_LOG_FORMAT=json \
    BIDKEEL_DATABASE_URL=sqlite:////data/bidkeel.db
VOLUME /data
EXPOSE 8080
STOPSIGNAL SIGTERM
HEALTHCHECK --interval=10s --timeout=3s --start-period=20s --retries=3 \
    CMD ["python", "-m", "service.commands.ready"]

CMD ["bidkeel", "serve"]
