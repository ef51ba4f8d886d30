"""Bodies that are no JSON, and strings that are no text: refused in good order, whatever the parser makes of them."""

from __future__ import annotations

import pytest

from .conftest import Caller


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b'{"kind":"\xe9"}', "UTF-8"),
        (b'{"a":' * 100_000, "nested too deeply"),
        (b"[" * 100_000, "nested too deeply"),
        (b'{"kind":' + b"9" * 5000 + b"}", "too many digits"),
        ('{"kind":"reconstruction"}'.encode("utf-16")[:-1], "UTF-8"),
        (b"{", "no JSON"),
        (b"", "empty"),
    ],
    ids=["not UTF-8", "deep objects", "deep lists", "endless number", "truncated UTF-16", "cut", "empty"],
)
def test_body_that_is_no_json_is_malformed(shared: Caller, body: bytes, words: str) -> None:
    answer = shared.post("/v1/jobs", content=body, headers={"Content-Type": "application/json"})
    assert answer.status_code == 400, answer.text
    problem = answer.json()
    assert problem["type"] == "urn:fallow:problem:malformed"
    assert words in problem["detail"]
    assert "send a JSON object" in problem["detail"]
    assert "correlation_id" not in problem


def test_lone_surrogate_is_refused_in_good_order(shared: Caller) -> None:
    body = b'{"kind": "reconstruction", "scan": "a", "settings": {"\\ud800": 1}}'
    answer = shared.post("/v1/jobs", content=body, headers={"Content-Type": "application/json"})
    assert answer.status_code == 422, answer.text
    assert answer.json()["errors"][0]["pointer"].startswith("/settings")
