# Sumwright as a service: one process, an unprivileged user, notebooks in a volume.
#   docker build -t sumwright .
#   docker run -p 5006:5006 -v sumwright-data:/data sumwright
FROM python:3.12-slim

RUN useradd --create-home --uid 10001 sumwright \
    && mkdir /data \
    && chown sumwright /data

WORKDIR /srv
COPY pyproject.toml README.md ./
COPY app ./app
RUN pip install --no-cache-dir '.[postgres]'

USER sumwright
ENV XDG_DATA_HOME=/data \
    PYTHONUNBUFFERED=1
VOLUME /data
EXPOSE 5006

HEALTHCHECK --interval=30s --timeout=5s --start-period=30s --retries=3 \
    CMD ["python", "-c", "import urllib.request; urllib.request.urlopen('http://127.0.0.1:5006/liveness', timeout=4)"]

# Behind a reverse proxy name the public address too: --allow-websocket-origin=sums.example.org
CMD ["panel", "serve", "app", "--address", "0.0.0.0", "--port", "5006", "--liveness", \
     "--allow-websocket-origin", "localhost:5006"]
