# One image for `bidkeel serve` and for every other command of the service.
FROM python:3.11-slim

RUN useradd --create-home --uid 10001 bidkeel \
    && install -d -o bidkeel -g bidkeel /data

WORKDIR /src
COPY pyproject.toml README.md LICENSE ./
COPY deploy/constraints.txt deploy/constraints.txt
COPY service service
COPY migrations migrations
RUN PIP_CONSTRAINT=deploy/constraints.txt pip install --no-cache-dir . \
    && rm -rf /src/build /src/bidkeel.egg-info

USER bidkeel
WORKDIR /data

# Inside a container the loopback address is reachable by nobody; publish the port with care.
ENV BIDKEEL_HOST=0.0.0.0 \
    BIDKEEL_DATABASE_URL=sqlite:////data/bidkeel.db
VOLUME /data
EXPOSE 8080

CMD ["bidkeel", "serve"]
