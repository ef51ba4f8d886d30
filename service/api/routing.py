"""What the routes share: the caller, preferences, filters, documented problems, checks before a body is parsed."""

from __future__ import annotations

import re
from collections.abc import Callable, Coroutine, Iterator
from typing import Annotated, Any, Final, cast

from fastapi import Depends, Query, Request, Response
from fastapi.dependencies.models import Dependant
from fastapi.routing import APIRoute
from pydantic import AwareDatetime, BeforeValidator

from service.errors import KINDS, PROBLEM_MEDIA_TYPE, Malformed, Refused, WrongMediaType
from service.schemas import Problem
from service.services import Services
from service.store.pages import Filter
from service.tokens import Principal

_LONGEST_WAIT: Final = 60
_LARGEST_PAGE: Final = 200
_WAIT: Final = re.compile(r"(?:^|[,;\s])wait\s*=\s*\"?(\d{1,9})\"?(?=$|[,;\s])", re.IGNORECASE)
_MOMENT: Final = re.compile(
    r"\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d:\d\d(?:\.\d{1,9})?(?:[Zz]|[+-]\d\d:\d\d)", re.ASCII
)
_KEY: Final = re.compile(r"[\x21-\x7e]{1,255}")


class Route(APIRoute):
    """A route that refuses query parameters it does not know, and bodies that are no JSON."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Put the checks before the handler that parses and calls."""
        handle = super().get_route_handler()
        known = set(_query_names(self.dependant))
        takes_json = bool(self.dependant.body_params)

        async def checked(request: Request) -> Response:
            unknown = sorted(set(request.query_params) - known)
            if unknown:
                accepted = f"accepted are {', '.join(sorted(known))}" if known else "this call takes none"
                raise Malformed(
                    f"unknown query parameter {', '.join(unknown)}; {accepted}",
                    errors=[{"parameter": name, "detail": "unknown"} for name in unknown],
                )
            names = [name for name, _ in request.query_params.multi_items()]
            repeated = sorted({name for name in names if names.count(name) > 1})
            if repeated:
                raise Malformed(
                    f"the query parameter {', '.join(repeated)} is given more than once; give it once",
                    errors=[{"parameter": name, "detail": "given more than once"} for name in repeated],
                )
            if takes_json:
                _check_json(request)
            return await handle(request)

        return checked


def services_of(request: Request) -> Services:
    """The parts behind the routes."""
    return cast(Services, request.app.state.services)


def caller_of(request: Request) -> Principal:
    """Who calls, as the token said."""
    return cast(Principal, request.state.caller)


Answers = dict[int | str, dict[str, Any]]
Parts = Annotated[Services, Depends(services_of)]
Caller = Annotated[Principal, Depends(caller_of)]


def _rfc3339(value: object) -> object:
    if isinstance(value, str) and _MOMENT.fullmatch(value) is None:
        raise ValueError(
            "expected a moment of RFC 3339 with its offset from UTC, such as 2026-03-01T09:30:00Z, received "
            f"{value[:60]!r}"
        )
    return value


Moment = Annotated[AwareDatetime, BeforeValidator(_rfc3339)]


def list_filter(
    label: Annotated[str | None, Query(max_length=200, description="exactly this label")] = None,
    state: Annotated[str | None, Query(description="exactly this state")] = None,
    created_after: Annotated[Moment | None, Query(description="made at or after this moment")] = None,
    created_before: Annotated[Moment | None, Query(description="made before this moment")] = None,
    cursor: Annotated[str | None, Query(description="`next` of the page before")] = None,
    limit: Annotated[int, Query(ge=1, le=_LARGEST_PAGE, description="most items of a page")] = 50,
) -> Filter:
    """The filters that lists share."""
    return Filter(label, state, created_after, created_before, cursor, limit)


ListFilter = Annotated[Filter, Depends(list_filter)]


def check_state(state: str | None, accepted: tuple[str, ...]) -> None:
    """Refuse a filter for a state that does not exist."""
    if state is not None and state not in accepted:
        raise Refused(
            f"there is no state {state!r}; accepted are {', '.join(accepted)}",
            errors=[{"parameter": "state", "detail": f"one of {', '.join(accepted)}"}],
        )


def preferred_wait(request: Request) -> float:
    """Seconds of `Prefer: wait=N` (RFC 7240), a minute at most; 0 without."""
    found = _WAIT.search(", ".join(request.headers.getlist("prefer")))
    return float(min(int(found[1]), _LONGEST_WAIT)) if found else 0.0


def wait_applied(seconds: float) -> dict[str, str]:
    """Header fields that say which wait was carried out."""
    return {"Preference-Applied": f"wait={seconds:.0f}"} if seconds else {}


def checked_key(request: Request) -> str | None:
    """The key that makes a repeated request harmless, if the caller sent one."""
    key = request.headers.get("idempotency-key")
    if key is not None and _KEY.fullmatch(key) is None:
        raise Malformed(
            "the Idempotency-Key is not well formed: send 1 to 255 printable ASCII characters, such as a random UUID",
            errors=[{"parameter": "Idempotency-Key", "detail": "1 to 255 printable ASCII characters"}],
        )
    return key


def documented(*statuses: int) -> Answers:
    """Describe the problems that a call answers with, for OpenAPI."""
    titles: dict[int, str] = {}
    for kind in KINDS.values():
        titles.setdefault(kind.status, kind.title)
    content = {PROBLEM_MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}
    return {
        status: {"description": titles[status], "model": Problem, "content": content}
        for status in sorted({400, 401, 421, 422, 503, *statuses})
    }


def _query_names(dependant: Dependant) -> Iterator[str]:
    for field in dependant.query_params:
        yield field.alias
    for inner in dependant.dependencies:
        yield from _query_names(inner)


def _check_json(request: Request) -> None:
    named = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    if named != "application/json":
        received = f"of the type {named}" if named else "without a Content-Type"
        raise WrongMediaType(f"the body is {received}; accepted is application/json: send the order as JSON")
