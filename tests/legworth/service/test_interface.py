"""Questions, orders, look-ups, metrics and health, as callers see them."""

from __future__ import annotations

import asyncio
import json
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import httpx
import numpy as np
import pytest
import structlog
from prometheus_client.parser import text_string_to_metric_families
from sqlalchemy import select

from legworth.decisions import SENTENCES, Reason, decide
from legworth.price_table import read_prices
from legworth.request_table import one_request
from legworth.service.ledger_tables import journal, overwritings
from legworth.service.serving import log_in_lines
from legworth.store import Store
from network import read_folder
from tests.legworth.service.in_process import Running, running


def judged(store: Path, itinerary: str, fare_class: str | None, fare: float | None, seats: int) -> Any:
    """What the command decides from the part's folder."""
    night = Store.open(store).in_force()
    assert night is not None
    for part in night.parts():
        folder = night.folder / f"part={part}"
        network = read_folder(folder).network
        if itinerary in set(network.itinerary):
            _, requests = one_request(network, itinerary, fare_class, fare, seats, None)
            found = decide(network, read_prices(folder, network), requests)
            binding = found.binding_leg[0]
            return found, None if binding < 0 else network.legs.name[binding]
    raise AssertionError(itinerary)


def problem(answer: httpx.Response, status: int) -> dict[str, Any]:
    """The problem of an answer, which has the one shape of errors."""
    assert answer.status_code == status, answer.text
    assert answer.headers["content-type"] == "application/problem+json"
    found: dict[str, Any] = answer.json()
    assert set(found) == {"type", "title", "status", "detail", "faults"}
    assert found["status"] == status and found["detail"]
    return found


def test_questions_are_answered_as_the_command_does(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            for question in (
                {"itinerary": "IN0-OUT1", "fare_class": "Y", "seats": 2},
                {"itinerary": "IN0-OUT1", "fare_class": "Q"},
                {"itinerary": "OUT2.1", "fare": 10.5},
                {"itinerary": "OUT2.1", "fare_class": "Y", "seats": 21},
            ):
                found, binding = judged(
                    store,
                    str(question["itinerary"]),
                    question.get("fare_class"),  # type: ignore[arg-type]
                    question.get("fare"),  # type: ignore[arg-type]
                    int(question.get("seats", 1)),
                )
                answer = (await service.ask(**question)).json()
                assert answer["reason"] == Reason(found.reason[0]).name.lower()
                assert answer["binding_leg"] == binding
                wanted = None if np.isnan(found.displacement[0]) else found.displacement[0]
                assert answer["displacement"] == pytest.approx(wanted)
                assert answer["night"] == "00001-2027-03-01"
                legs = {**question, "legs": answer["legs"]}
                del legs["itinerary"]
                assert (await service.ask(**legs)).json() == answer

    asyncio.run(check())


def test_many_are_answered_as_one_is(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            names = ["IN0", "IN0.1", "nowhere", "IN0-OUT1", "IN2.1-OUT0.1", "IN0\0"]
            classes = ["Y", "M", "Y", "Q", "?", "Y"]
            many = {"itinerary": names, "fare_class": classes, "sentences": True}
            answers = (await service.client.post("/v1/decisions/batch", json=many)).json()
            for place, (name, fare_class) in enumerate(zip(names, classes, strict=True)):
                if name in {"nowhere", "IN0\0"}:
                    assert answers["reason"][place] == "unknown_itinerary"
                    assert answers["sentence"][place] == SENTENCES[Reason.UNKNOWN_ITINERARY]
                    continue
                one = (await service.ask(itinerary=name, fare_class=fare_class)).json()
                for column in ("accepted", "reason", "fare", "displacement", "binding_leg", "sentence"):
                    assert answers[column][place] == one[column]
            plain = {"itinerary": ["IN0"], "fare": [500.0]}
            assert (await service.client.post("/v1/decisions/batch", json=plain)).json()["sentence"] is None

    asyncio.run(check())


def test_a_class_not_sold_is_an_answer_and_an_itinerary_not_sold_is_an_error(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            answer = await service.ask(itinerary="IN0", fare_class="Z", fare=9_000.0)
            assert answer.status_code == 200
            assert (answer.json()["accepted"], answer.json()["reason"]) == (False, "unknown_product")
            sale = (await service.sell("k", itinerary="IN0", fare_class="Z", at_any_price=True)).json()
            assert (sale["accepted"], sale["reason"]) == (False, "unknown_product")
            assert (await service.sell("k", itinerary="IN0", fare_class="Z", at_any_price=True)).json()["repeated"]
            for question in ({"itinerary": "none"}, {"legs": ["IN0", "none"]}):
                problem(await service.ask(**question, fare=9_000.0), 404)
            many = {"itinerary": ["none", "IN0", "IN0"], "fare_class": ["Y", "Z", "Y"], "fare": [None, None, 9_000.0]}
            answers = (await service.client.post("/v1/decisions/batch", json=many)).json()
            assert answers["reason"] == ["unknown_itinerary", "unknown_product", "fare_reaches_price"]

    asyncio.run(check())


def test_a_batch_above_its_limit_is_refused(store: Path) -> None:
    async def check() -> None:
        async with running(store, batch_limit=3) as service:
            for count, status in ((3, 200), (4, 422)):
                body = {"itinerary": ["IN0"] * count, "fare": [500.0] * count}
                answer = await service.client.post("/v1/decisions/batch", json=body)
                assert answer.status_code == status

    asyncio.run(check())


async def sold(service: Running, leg: str) -> int:
    return int((await service.get(f"/v1/legs/{leg}")).json()["sold"])


def test_seats_are_sold_on_all_legs_or_none_and_given_back(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            first = (await service.sell("one", itinerary="IN0-OUT1", fare=5_000.0, seats=19)).json()
            assert first["accepted"] and not first["repeated"] and not first["at_any_price"]
            again = (await service.sell("one", itinerary="IN0-OUT1", fare=5_000.0, seats=19)).json()
            assert again == {**first, "repeated": True}
            problem(await service.sell("one", itinerary="IN0-OUT1", fare=5_000.0, seats=18), 409)
            assert (await service.sell(itinerary="IN0", fare=5_000.0)).json()["accepted"]
            refused = (await service.sell(itinerary="IN0-OUT1", fare=5_000.0)).json()
            assert (refused["accepted"], refused["reason"], refused["binding_leg"]) == (False, "no_seats", "IN0")
            assert [await sold(service, leg) for leg in ("IN0", "OUT1", "OUT2")] == [20, 19, 0]
            some = (await service.order("/v1/sales/one/cancellations", {"seats": 4}, "back")).json()
            assert (some["accepted"], some["left"]) == (True, 15)
            assert (await service.order("/v1/sales/one/cancellations", {"seats": 4}, "back")).json()["repeated"]
            rest = (await service.order("/v1/sales/one/cancellations", {})).json()
            assert (rest["seats"], rest["left"]) == (15, 0)
            assert not (await service.order("/v1/sales/one/cancellations", {})).json()["accepted"]
            problem(await service.order("/v1/sales/never/cancellations", {}), 404)
            assert [await sold(service, leg) for leg in ("IN0", "OUT1", "OUT2")] == [1, 0, 0]

    asyncio.run(check())


def test_a_seat_sold_below_its_price_shows_in_the_journal(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            assert not (await service.sell("low", itinerary="IN0", fare=0.0)).json()["accepted"]
            forced = (await service.sell("forced", itinerary="IN0", fare=0.0, at_any_price=True)).json()
            assert forced["accepted"] and forced["at_any_price"]
            assert forced["sentence"].startswith("Sold at any price: ")
            plain = (await service.sell("plain", itinerary="IN0", fare=9_000.0, at_any_price=True)).json()
            assert plain["accepted"] and not plain["at_any_price"]
            full = (await service.sell("full", itinerary="IN0", fare=0.0, seats=20, at_any_price=True)).json()
            assert not full["accepted"] and not full["at_any_price"]
            with service.state.ledger.engine.connect() as connection:
                rows = connection.execute(select(journal).order_by(journal.c.number)).all()
            assert [(row.key, row.accepted, row.at_any_price, row.who) for row in rows] == [
                ("low", False, False, "tester"),
                ("forced", True, True, "tester"),
                ("plain", True, False, "tester"),
                ("full", False, False, "tester"),
            ]

    asyncio.run(check())


def test_an_answered_key_is_answered_again_when_the_leg_has_gone(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            order = {"itinerary": "IN0", "fare": 900.0}
            first = (await service.sell("k", **order)).json()
            night, service.state.served = service.state.served, None
            assert (await service.sell("k", **order)).json() == {**first, "repeated": True}
            problem(await service.sell("other", **order), 503)
            service.state.served = night
            problem(await service.sell("other", itinerary="gone", fare=900.0), 404)
            assert await sold(service, "IN0") == 1

    asyncio.run(check())


def test_the_carriers_counts_replace_those_of_the_ledger(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            await service.sell(itinerary="IN0", fare=900.0)
            assert (await service.count(("IN0", 18, 17), ("IN1", 20, 0))).json()["moved"] == 1
            leg = (await service.get("/v1/legs/IN0")).json()
            assert (leg["capacity"], leg["sold"], leg["remaining"]) == (18, 17, 1)
            assert (await service.ask(itinerary="IN0", fare=9_000.0, seats=2)).json()["reason"] == "too_few_seats"
            with service.state.ledger.engine.connect() as connection:
                (row,) = connection.execute(select(overwritings)).all()
            assert (row.leg, row.sold_before, row.sold, row.who, row.why) == ("IN0", 1, 17, "tester", "a test")

    asyncio.run(check())


def test_look_ups(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            leg = (await service.get("/v1/legs/OUT1.1")).json()
            assert (leg["origin"], leg["destination"], leg["remaining"]) == ("HUB", "S1", 20)
            assert leg["departs"].startswith("2027-03-12T11:00:00")
            itinerary = (await service.get("/v1/itineraries/IN0-OUT1")).json()
            assert itinerary["legs"] == ["IN0", "OUT1"]
            assert [(each["fare_class"], each["fare"]) for each in itinerary["products"]] == [
                ("Y", 600.0),
                ("M", 375.0),
                ("Q", 180.0),
            ]
            for each in itinerary["products"]:
                one = (await service.ask(itinerary="IN0-OUT1", fare_class=each["fare_class"])).json()
                assert (each["answer"] == "accept", each["reason"]) == (one["accepted"], one["reason"])
                assert itinerary["displacement"] == one["displacement"]
            (night,) = (await service.get("/v1/nights")).json()
            assert night == (await service.get("/v1/nights/00001-2027-03-01")).json()
            assert (night["legs"], night["in_force"]) == (12, True)
            for path in ("legs/none", "itineraries/none", "nights/none", "legs/a/b", "legs/%00", "nothing"):
                problem(await service.get(f"/v1/{path}"), 404)

    asyncio.run(check())


def test_departed_legs_are_not_sold(store: Path) -> None:
    async def check() -> None:
        async with running(store, at=datetime(2027, 3, 11, 9, tzinfo=UTC)) as service:
            answer = (await service.sell(itinerary="IN0-OUT1", fare=9_000.0)).json()
            assert (answer["reason"], answer["binding_leg"]) == ("departed", "IN0")
            assert (await service.get("/v1/legs/IN0")).json()["price_now"] is None
            assert (await service.sell(itinerary="OUT1", fare=9_000.0)).json()["accepted"]

    asyncio.run(check())


def test_metrics_can_be_read_by_others(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            await service.sell(itinerary="IN0", fare=9_000.0, seats=3)
            await service.get("/v1/legs/none")
            await service.client.post("/v1/decisions", content=b"x" * 2_000_000)
            text = (await service.get("/metrics")).text
            families = {family.name: family for family in text_string_to_metric_families(text)}
            requests = {
                (sample.labels["route"], sample.labels["status"]): sample.value
                for sample in families["legworth_requests"].samples
                if sample.name == "legworth_requests_total"
            }
            assert requests["/v1/sales", "200"] == 1
            assert requests["/v1/legs/{leg:path}", "404"] == 1
            assert requests["other", "413"] == 1
            assert families["legworth_seats_sold"].samples[0].value == 3
            assert families["legworth_night_number"].samples[0].value == 1
            assert {s.labels["what"]: s.value for s in families["legworth_trouble"].samples} == {
                "store": 0,
                "ledger": 0,
            }

    asyncio.run(check())


def test_an_error_that_nobody_meant_is_answered_and_logged_in_one_line(
    store: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def broken(*_: Any) -> Any:
        variable = "in".join(["secret", "side"])
        raise RuntimeError("it broke" + variable[:0])

    monkeypatch.setattr("legworth.service.interface.ask", broken)

    async def check() -> None:
        async with running(store) as service:
            problem(await service.ask(itinerary="IN0", fare=1.0), 500)

    log_in_lines()
    try:
        asyncio.run(check())
    finally:
        structlog.reset_defaults()
    lines = capsys.readouterr().err.splitlines()
    (line,) = [json.loads(line) for line in lines if "request failed" in line]
    assert (line["path"], line["level"]) == ("/v1/decisions", "error")
    assert "it broke" in json.dumps(line["exception"])
    assert "secretinside" not in json.dumps(line) and "IN0" not in json.dumps(line)
