# Sumwright as a service: an unprivileged user, notebooks and settings in a volume.
#
#   docker build -t sumwright .
#   docker run -it --rm -v sumwright:/data sumwright sumwright people add NAME --role keeper
#   docker run -d -p 5006:5006 -v sumwright:/data -e SUMWRIGHT_ORIGINS=bench.lab.example:5006 sumwright
#
# For one person on this machine alone, without sign-in:
#
#   docker run -d -p 127.0.0.1:5006:5006 -v sumwright:/data \
#     -e SUMWRIGHT_SIGN_IN=none -e SUMWRIGHT_TRUST_NETWORK=true sumwright
FROM python:3.12-slim

RUN useradd --create-home --uid 10001 sumwright \
    && mkdir /data \
    && chown sumwright /data

WORKDIR /srv
COPY pyproject.toml README.md ./
COPY app ./app
RUN pip install --no-cache-dir '.[postgres]'

USER sumwright
ENV PYTHONUNBUFFERED=1 \
    SUMWRIGHT_DATA=/data \
    SUMWRIGHT_ADDRESS=0.0.0.0 \
    SUMWRIGHT_SIGN_IN=password
VOLUME /data
EXPOSE 5006

HEALTHCHECK --interval=30s --timeout=5s --start-period=30s --retries=3 \
    CMD ["python", "-c", "import urllib.request; urllib.request.urlopen('http://127.0.0.1:5006/health', timeout=4)"]

CMD ["sumwright", "serve"]
