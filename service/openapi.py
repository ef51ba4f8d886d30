"""The OpenAPI document: what FastAPI derives from the routes, and what it cannot know."""

from __future__ import annotations

from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi

from recon.caution import CAUTION
from service.errors import PROBLEM_MEDIA_TYPE
from service.schemas import Problem

_SUMMARY = "Turns undersampled multi-coil Cartesian MRI k-space into images and says how well they agree with the data."


def describe(app: FastAPI) -> None:
    """Have the application describe itself with token, problem details and HEAD."""

    def openapi() -> dict[str, Any]:
        if app.openapi_schema is None:
            app.openapi_schema = _document(app)
        return app.openapi_schema

    app.openapi = openapi  # type: ignore[method-assign]


def _document(app: FastAPI) -> dict[str, Any]:
    document = get_openapi(
        title=app.title,
        version=app.version,
        routes=app.routes,
        summary=_SUMMARY,
        description=f"{CAUTION} GET routes answer HEAD as well. Errors are problem details (RFC 9457).",
    )
    components = document.setdefault("components", {})
    components.setdefault("schemas", {})["Problem"] = {
        **Problem.model_json_schema(ref_template="#/components/schemas/{model}"),
    }
    components["schemas"]["Problem"].pop("$defs", None)
    components["securitySchemes"] = {"token": {"type": "http", "scheme": "bearer"}}
    document["security"] = [{"token": []}]
    for path, operations in document["paths"].items():
        for operation in operations.values():
            if path.startswith("/health/"):
                operation["security"] = []
            for answer in operation["responses"].values():
                # FastAPI adds its own media type to the one named for problems.
                if PROBLEM_MEDIA_TYPE in answer.get("content", {}):
                    answer["content"] = {PROBLEM_MEDIA_TYPE: answer["content"][PROBLEM_MEDIA_TYPE]}
    return document
