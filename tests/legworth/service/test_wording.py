"""Faults of requests and settings are said in words of this project, with what would mend them."""

from __future__ import annotations

import asyncio
import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from pydantic import BaseModel, ValidationError

from legworth.service.messages import Ask, AskMany, Cancel, Sell, Snapshot
from legworth.service.settings import ServiceSettings, read_service_settings
from legworth.service.wording import fault_words, names_at
from network import SettingError
from tests.legworth.service.in_process import running
from tests.legworth.service.test_interface import problem

LIBRARY = re.compile(
    r"[Ii]nput should|inputs are not permitted|[Vv]alue error|[Ff]ield required|should match|[Uu]nable to parse|"
    r"should have at|valid (integer|number|boolean|string|tuple|list|dictionary)|Invalid JSON"
)
"""Words of pydantic's messages (its documentation, Validation Errors), whatever the version."""

ASK = "itinerary, legs, fare_class, fare, seats"
WRONG: list[tuple[str, Any, list[str]]] = [
    (
        "decisions",
        {"itinerary": "IN0", "fare_clas": "Y"},
        [f"body.fare_clas: is no field known here; write fare_class if that is meant (known are {ASK})"],
    ),
    (
        "decisions",
        {"itinerary": "IN0", "fare": 1, "zzz": 1},
        [f"body.zzz: is no field known here; leave it out (known are {ASK})"],
    ),
    ("decisions", {"itinerary": "IN0", "legs": ["IN0"], "fare": 1}, ["body: give either an itinerary or its legs"]),
    ("decisions", {"itinerary": "IN 0", "fare": "1"}, ["body.itinerary: holds a space", "body.fare: is no number"]),
    ("decisions", {"itinerary": "", "fare": -1}, ["at least 1 character", "body.fare: is too small; give at least 0"]),
    ("decisions", {"itinerary": "x" * 201, "fare": 1e10}, ["at most 200 characters", "give at most 1,000,000,000"]),
    ("decisions", {"itinerary": "IN0", "fare": 1, "seats": 1.5}, ["body.seats: is no whole number; give one"]),
    ("decisions", {"legs": [], "fare": 1}, ["body.legs: has too few entries; give at least 1 entry"]),
    ("decisions", {"legs": [f"L{n}" for n in range(13)], "fare": 1}, ["has too many entries; give at most 12 entries"]),
    ("decisions", [], ["body: is no object; give one, in braces"]),
    ("decisions", {"legs": "IN0", "fare": 1}, ["body.legs: is no list; give one, in square brackets"]),
    ("decisions/batch", {}, ["body.itinerary: is missing; give it"]),
    ("decisions/batch", {"itinerary": ["IN0"], "fare": [1], "sentences": 1}, ["body.sentences: is neither true nor"]),
    ("decisions/batch", {"itinerary": [1], "fare": [1]}, ["body.itinerary.0: is no text"]),
]


def test_faults_of_bodies(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            for address, body, said in WRONG:
                faults = problem(await service.client.post(f"/v1/{address}", json=body), 422)["faults"]
                assert len(faults) == len(said), faults
                for fault, words in zip(faults, said, strict=True):
                    assert words in fault
                    assert not LIBRARY.search(fault)

    asyncio.run(check())


def test_faults_of_entries_name_the_fields_of_an_entry(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            body = {"why": "a\nb", "counts": [{"legg": "IN0", "capacity": "5", "sold": 0}]}
            headers = {"Authorization": f"Bearer {service.token}"}
            answer = await service.client.put("/v1/seat-counts", json=body, headers=headers)
            assert problem(answer, 422)["faults"] == [
                "body.why: holds a control character, such as a line break; leave it out",
                "body.counts.0.leg: is missing; give it",
                "body.counts.0.capacity: is no whole number; give one, such as 2",
                "body.counts.0.legg: is no field known here; write leg if that is meant (known are leg, capacity, "
                "sold)",
            ]

    asyncio.run(check())


def test_a_body_that_is_no_json_is_said_to_be_none(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            headers = {"Content-Type": "application/json"}
            answer = await service.client.post("/v1/decisions", content=b'{"itinerary": }', headers=headers)
            (fault,) = problem(answer, 422)["faults"]
            assert fault.startswith("body: cannot be read as JSON (")
            assert "line 1 column 15" in fault
            assert not LIBRARY.search(fault)

    asyncio.run(check())


def test_faults_of_headers_and_paths(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            order = {"itinerary": "IN0", "fare": 900.0}
            for key, words in (("a b", "header.Idempotency-Key: may hold printable ASCII"), ("x" * 201, "at most 200")):
                (fault,) = problem(await service.order("/v1/sales", order, key), 422)["faults"]
                assert words in fault
                assert not LIBRARY.search(fault)
            headers = {"Authorization": f"Bearer {service.token}"}
            answer = await service.client.post("/v1/sales", json=order, headers=headers)
            assert problem(answer, 422)["faults"] == ["header.Idempotency-Key: is missing; give it"]

    asyncio.run(check())


def test_faults_of_pages(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            for address, words in (
                ("/itinerary?name=IN0&n=two", "n: is no whole number; give one, such as 2"),
                ("/itinerary?name=IN0&n=0", "n: is too small; give at least 1"),
                ("/itinerary?n=1", "name: is missing; give it"),
                ("/disagreements?least=much", "least: is no amount; write digits, such as 150 or 150.50"),
                ("/map?figure=colour", "figure: is not one of those known; give &#39;price&#39;, "),
                ("/leg?name=IN0&all=perhaps", "all: is neither true nor false"),
            ):
                answer = await service.get(address)
                assert answer.status_code == 400
                assert words in answer.text
                assert not LIBRARY.search(answer.text)

    asyncio.run(check())


@pytest.mark.parametrize(
    ("line", "words"),
    [
        (
            "ratelimit = 5",
            "ratelimit: is no setting known here; write rate_limit if that is meant (known are database, ",
        ),
        ("qqq = 5", "qqq: is no setting known here; leave it out (known are database, "),
        ("burst = 0", "burst: is too small; give at least 1"),
        ("follow_seconds = 0", "follow_seconds: is too small; give more than 0"),
        ("follow_seconds = 3601.0", "follow_seconds: is too great; give at most 3,600"),
        ("rate_limit = nan", "rate_limit: is no number; give one"),
        ("trusted_proxies = [1]", "trusted_proxies.0: is no text; give one in quotation marks"),
    ],
)
def test_faults_of_settings(line: str, words: str, tmp_path: Path) -> None:
    path = tmp_path / "st.toml"
    path.write_text(line)
    with pytest.raises(SettingError) as raised:
        read_service_settings(path)
    assert str(raised.value).startswith(f"{path}: {words}")
    assert not LIBRARY.search(str(raised.value))


def test_every_fault_that_a_message_can_have_has_words() -> None:
    kinds = {kind for model in (Ask, AskMany, Sell, Cancel, Snapshot, ServiceSettings) for kind in faults_drawn(model)}
    assert len(kinds) >= 12
    for kind, words in kinds:
        assert not LIBRARY.search(words), kind
        assert "cannot be taken" not in words, kind


def faults_drawn(model: type[BaseModel]) -> Iterator[tuple[str, str]]:
    """Kinds and words of the faults of a message whose fields are all wrong, in many ways."""
    wrong: list[Any] = [
        None,
        True,
        -1,
        10**30,
        0.5,
        float("nan"),
        "",
        "\n",
        "x y",
        "x" * 2_000,
        [],
        {},
        [1],
        [{}],
        [[]],
    ]
    for value in wrong:
        for text in (json.dumps(dict.fromkeys(model.model_fields, value)), json.dumps(value)):
            try:
                model.model_validate_json(text)
            except ValidationError as error:
                for each in error.errors():
                    yield each["type"], fault_words(each, names_at(model, each["loc"]))
