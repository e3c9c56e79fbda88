"""The interface's own description (OpenAPI), where the routes cannot tell it by themselves.

Every refusal and failure has the one shape of `payloads.error`; files have the media type of their ending; what is sent
as a body is described as the bytes it is.  Never changes what a route does.
"""

from collections.abc import Callable
from typing import Any

from fastapi import FastAPI

# What a path ends with -> what it answers with, where that is no JSON.
MEDIA = {
    ".csv": "text/csv", ".geojson": "application/geo+json", ".ics": "text/calendar", ".inx": "text/plain",
    ".nc": "application/x-netcdf", ".parquet": "application/vnd.apache.parquet", ".pdf": "application/pdf",
    "/sheet": "text/html", "/work/news": "text/event-stream",
}  # fmt: skip
# Method and path of what takes a file as its body.
TAKES_A_FILE = (
    ("post", "/api/days/{region}/{day}/beside"),
    ("put", "/api/batches/{batch}/files"),
    ("post", "/api/sites/{region}/list"),
)
FAILURE = {
    "type": "object",
    "required": ["ok", "error", "kind", "details", "status"],
    "additionalProperties": False,
    "properties": {
        "ok": {"const": False},
        "error": {"type": "string", "description": "a sentence for people"},
        "kind": {"type": "string", "description": "its name in the program"},
        "details": {"type": "object"},
        "status": {"type": "integer", "minimum": 400, "maximum": 599},
    },
}


def describe(app: FastAPI) -> Callable[[], dict[str, Any]]:
    """The description of an application, made at the first question."""
    plain = app.openapi

    def told() -> dict[str, Any]:
        if app.openapi_schema is None:
            _complete(plain())
        return plain()

    return told


def _complete(description: dict[str, Any]) -> None:
    shapes = description.setdefault("components", {}).setdefault("schemas", {})
    for name in ("HTTPValidationError", "ValidationError"):
        shapes.pop(name, None)
    shapes["Failure"] = FAILURE
    failure = {"application/json": {"schema": {"$ref": "#/components/schemas/Failure"}}}
    for path, methods in description["paths"].items():
        media = next((kind for ending, kind in MEDIA.items() if path.endswith(ending)), "application/json")
        for method, operation in methods.items():
            answers = operation["responses"]
            answers.pop("422", None)
            for answer in answers.values():
                answer["content"] = {media: {}}
            answers["default"] = {"description": "A refusal or a failure, in words", "content": failure}
            if (method, path) in TAKES_A_FILE:
                binary = {"schema": {"type": "string", "format": "binary"}}
                operation["requestBody"] = {"required": True, "content": {"application/octet-stream": binary}}
