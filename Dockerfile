FROM python:3.12-slim

WORKDIR /opt/crossdip
COPY . .
RUN python -m venv /opt/venv \
    && /opt/venv/bin/pip install --no-cache-dir -c .ci/constraints.txt -e . \
    && useradd --create-home --uid 10014 crossdip \
    # The compiled kernels are cached beside the source, for the processor they run on.
    && mkdir -p /data solver/__pycache__ \
    && chown crossdip /data solver/__pycache__

USER crossdip
ENV PATH=/opt/venv/bin:$PATH CROSSDIP_DATA=/data CROSSDIP_HOST=0.0.0.0 PYTHONUNBUFFERED=1
VOLUME /data
EXPOSE 8014
HEALTHCHECK --interval=10s --timeout=3s --start-period=20s CMD ["python", "-c", \
    "import urllib.request; urllib.request.urlopen('http://127.0.0.1:8014/healthz', timeout=2)"]
# The first start needs an access key: run once with `crossdip serve --new-access-key`, or set
# CROSSDIP_ACCESS_KEY.
CMD ["crossdip", "serve"]
