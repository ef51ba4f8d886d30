"""What the web framework refuses, as errors of ours with pointers to the single mistakes."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from typing import Any

from fastapi.exceptions import RequestValidationError
from fastapi.routing import APIRoute
from starlette.exceptions import HTTPException

from recon.errors import InvalidSettings, ReconError
from service.errors import Malformed, MethodNotAllowed, NotFound, Refused, ServiceError, pointers


def from_validation(error: RequestValidationError) -> ServiceError:
    """Turn a validation error into 400 (no JSON at all) or 422 (JSON that is refused)."""
    items = error.errors()
    for item in items:
        if item["type"] == "json_invalid":
            return Malformed(f"the body is no JSON: {item['ctx']['error']}; send a JSON object")
        if item["type"] == "missing" and tuple(item["loc"]) == ("body",):
            return Malformed("the body is empty: send a JSON object")
    mistakes = list(_unique(mistake for item in items for mistake in _mistakes(item)))
    places = [mistake.get("pointer") or mistake.get("parameter") or "body" for mistake in mistakes]
    detail = "; ".join(
        f"{place}: {mistake['detail']}" for place, mistake in zip(places, mistakes, strict=True)
    )
    return Refused(detail, errors=mistakes)


def from_http(path: str, method: str, error: HTTPException, routes: Iterable[APIRoute]) -> Exception:
    """Turn an error of the framework into one of ours; one that it only wrapped comes out again."""
    cause = error.__cause__
    if isinstance(cause, ValueError | RecursionError) and not isinstance(cause, ServiceError | ReconError):
        # What the parser says of bytes that are no text, of numbers without end and of a bottomless nesting.
        return Malformed(f"the body is no JSON: {_why_no_json(cause)}; send a JSON object in UTF-8")
    if isinstance(cause, Exception):
        return cause
    if error.status_code == 404:
        return NotFound(f"there is nothing at {path}: see /openapi.json for the paths there are")
    if error.status_code == 405:
        methods = {name for route in routes if route.path_regex.match(path) for name in route.methods or ()}
        accepted = ", ".join(sorted(methods | ({"HEAD"} if "GET" in methods else set())))
        return MethodNotAllowed(
            f"{path} does not answer {method}; it answers {accepted}",
            headers={"Allow": accepted},
        )
    return Malformed(str(error.detail))


def _why_no_json(cause: ValueError | RecursionError) -> str:
    if isinstance(cause, RecursionError):
        return "it is nested too deeply"
    if isinstance(cause, UnicodeError):
        return "its bytes are no text in UTF-8"
    return "it holds a number with too many digits"


def _mistakes(item: Mapping[str, Any]) -> Iterator[dict[str, str]]:
    place, *path = item["loc"]
    cause = item.get("ctx", {}).get("error")
    if isinstance(cause, InvalidSettings):
        yield from pointers(cause)
        return
    detail = item["msg"].removeprefix("Value error, ")
    detail = detail[:1].lower() + detail[1:]
    if item["type"] == "extra_forbidden":
        detail = "unknown; leave it out"
    elif item["type"] == "missing":
        detail = "missing; it is required"
    elif item["type"] != "value_error" and isinstance(item.get("input"), str | int | float | bool | None):
        detail += f"; received {item['input']!r}"[:200]
    if place == "body":
        yield {"pointer": "".join(f"/{_escape(part)}" for part in path), "detail": detail}
    else:
        yield {"parameter": str(path[-1]) if path else str(place), "detail": detail}


def _escape(part: object) -> str:
    return str(part).replace("~", "~0").replace("/", "~1")


def _unique(mistakes: Iterator[dict[str, str]]) -> Iterator[dict[str, str]]:
    seen = set()
    for mistake in mistakes:
        key = tuple(sorted(mistake.items()))
        if key not in seen:
            seen.add(key)
            yield mistake
