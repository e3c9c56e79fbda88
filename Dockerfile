# One image for every part of Skylag.  Build from the project's top folder.
FROM python:3.12-slim

# An account without rights; it owns the data folder and nothing else.
RUN useradd --system --create-home --uid 10001 skylag && mkdir /data && chown skylag:skylag /data

WORKDIR /app
COPY pyproject.toml README.md LICENSE ./
COPY backend backend
COPY frontend frontend
# Editable, so that the page's files are found beside the backend.
RUN pip install --no-cache-dir -e ".[server]"

USER skylag
VOLUME /data
EXPOSE 8017
CMD ["skylag", "serve", "--host", "0.0.0.0", "--port", "8017", "--archive", "/data"]
