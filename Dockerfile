# One image for every process: the command decides (web, worker, scheduler, or a management command).
FROM python:3.13-slim-bookworm AS build

ENV PIP_DISABLE_PIP_VERSION_CHECK=1 PIP_NO_CACHE_DIR=1 PYTHONDONTWRITEBYTECODE=1
WORKDIR /service
RUN python -m venv /service/.venv
COPY requirements.txt .
# By hash and never from source: what runs is exactly what the lock file names.
RUN .venv/bin/pip install --require-hashes --only-binary=:all: --requirement requirements.txt

COPY manage.py .
COPY config config
COPY evidence evidence
COPY analysis analysis
COPY api api
COPY dashboard dashboard
COPY fixtures fixtures

# The key and the address are thrown away with this step; collecting files uses neither.
RUN SECRET_KEY=only-for-this-step DATABASE_URL=postgresql:///none STEELYARD_STATIC_ROOT=/service/static \
    .venv/bin/python manage.py collectstatic --no-input --verbosity 0

FROM python:3.13-slim-bookworm

RUN useradd --system --uid 10001 --home-dir /service --shell /usr/sbin/nologin steelyard \
    && install -d -o steelyard -m 700 /data /kernels
WORKDIR /service
COPY --from=build /service /service
ENV PATH=/service/.venv/bin:$PATH \
    PYTHONDONTWRITEBYTECODE=1 \
    NUMBA_CACHE_DIR=/kernels \
    NUMBA_CPU_NAME=generic \
    STEELYARD_BIND=0.0.0.0:8000 \
    STEELYARD_DATA=/data \
    STEELYARD_STATIC_ROOT=/service/static
USER steelyard
# The numerical kernels are compiled here, so that no answer waits for the compiler; and for a plain processor, so
# that the image runs on other machines than the one that built it.
RUN python -m analysis.methods.warm
EXPOSE 8000
ENTRYPOINT ["python", "-m", "config.services"]
CMD ["web"]
