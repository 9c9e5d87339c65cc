"""Seats are never oversold and never lost; an order is carried out once."""

from __future__ import annotations

import random
import threading
from collections.abc import Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest
from sqlalchemy import select, text

from legworth.service.errors import KeyReusedError, LedgerError, UnknownLegError, UnknownSaleError
from legworth.service.ledger import Ledger
from legworth.service.ledger_tables import journal, overwritings
from legworth.service.orders import Cancellation, Outcome, Overwriting, Sale, SeatCount
from legworth.service.writer import LedgerWriter
from network import SettingError


@pytest.fixture
def ledger(database: str) -> Iterator[Ledger]:
    ledger = Ledger(database)
    ledger.add_legs([SeatCount("A", 5, 1), SeatCount("B", 3, 0), SeatCount("C", 2, 4)])
    yield ledger
    ledger.close()


def while_seats_last(seats: int) -> Any:
    """A judge that accepts as long as the party fits."""

    def judge(left: Mapping[str, int]) -> dict[str, Any]:
        return {"accepted": min(left.values()) >= seats, "left": dict(left)}

    return judge


def sale(key: str, legs: tuple[str, ...], seats: int = 1) -> Sale:
    return Sale(key, legs, seats, {"legs": list(legs), "seats": seats}, while_seats_last(seats))


def sold(ledger: Ledger) -> dict[str, int]:
    return {leg: count.sold for leg, count in ledger.counts().items()}


def carry_out(ledger: Ledger, orders: list[Sale | Cancellation]) -> list[Outcome | Exception]:
    """Outcomes of some orders; the counts told are those that the ledger keeps."""
    before = ledger.counts()
    carried = ledger.carry_out(orders)
    after = ledger.counts()
    moved = {leg for leg in after if after[leg] != before[leg]}
    assert {count.leg for count in carried.counts} >= moved
    assert all(after[count.leg] == count for count in carried.counts)
    return carried.outcomes


def outcome(found: Outcome | Exception) -> Outcome:
    assert isinstance(found, Outcome), found
    return found


def test_a_sale_takes_all_its_legs_or_none(ledger: Ledger) -> None:
    first, second = (
        outcome(found) for found in carry_out(ledger, [sale("1", ("A", "B"), 3), sale("2", ("A", "B"), 1)])
    )
    assert first.answer["accepted"] and not second.answer["accepted"]
    assert second.answer["left"] == {"A": 1, "B": 0}
    assert sold(ledger) == {"A": 4, "B": 3, "C": 4}


def test_the_ledger_does_not_trust_a_judge_that_oversells(ledger: Ledger) -> None:
    careless = Sale("1", ("A", "C"), 1, {}, lambda left: {"accepted": True})
    (found,) = carry_out(ledger, [careless])
    assert isinstance(found, LedgerError)
    assert sold(ledger) == {"A": 1, "B": 0, "C": 4}


def test_a_key_is_carried_out_once(ledger: Ledger) -> None:
    order = sale("1", ("B",), 2)
    for repeated in (False, True, True):
        found = outcome(carry_out(ledger, [order])[0])
        assert (found.answer["accepted"], found.repeated) == (True, repeated)
    twice = carry_out(ledger, [sale("2", ("A",)), sale("2", ("A",))])
    assert [outcome(found).repeated for found in twice] == [False, True]
    assert sold(ledger) == {"A": 2, "B": 2, "C": 4}


def test_a_refusal_is_remembered_too(ledger: Ledger) -> None:
    assert not outcome(carry_out(ledger, [sale("1", ("C",))])[0]).answer["accepted"]
    ledger.overwrite([SeatCount("C", 9, 0)], "stores", "snapshot")
    again = outcome(carry_out(ledger, [sale("1", ("C",))])[0])
    assert again.repeated and not again.answer["accepted"]


def test_a_key_used_for_another_order_is_an_error(ledger: Ledger) -> None:
    carry_out(ledger, [sale("1", ("A",))])
    for other in (sale("1", ("A",), 2), sale("1", ("B",)), Cancellation("1", "1")):
        assert isinstance(carry_out(ledger, [other])[0], KeyReusedError)
    assert sold(ledger)["A"] == 2


def test_seats_come_back_once(ledger: Ledger) -> None:
    carry_out(ledger, [sale("1", ("A", "B"), 3)])
    steps = [("x", 1, True, 2), ("x", 1, True, 2), ("y", 5, False, 2), ("z", None, True, 0), ("w", None, False, 0)]
    for key, seats, accepted, left in steps:
        found = outcome(carry_out(ledger, [Cancellation(key, "1", seats)])[0])
        assert (found.answer["accepted"], found.answer["left"]) == (accepted, left)
    assert sold(ledger) == {"A": 1, "B": 0, "C": 4}


def test_a_sale_can_be_cancelled_in_its_own_batch(ledger: Ledger) -> None:
    found = carry_out(ledger, [sale("1", ("A", "B"), 2), Cancellation("2", "1", 1), sale("3", ("B",), 2)])
    assert [outcome(each).answer["accepted"] for each in found] == [True, True, True]
    assert sold(ledger) == {"A": 2, "B": 3, "C": 4}


def test_a_bad_order_leaves_no_trace_and_spares_the_others(ledger: Ledger) -> None:
    def broken(left: Mapping[str, int]) -> dict[str, Any]:
        raise RuntimeError("no price")

    orders = [
        sale("1", ("A", "nowhere")),
        Sale("2", ("A",), 1, {}, broken),
        Cancellation("3", "never"),
        sale("4", ("A", "A")),
        sale("5", ("A",), 0),
        sale("6", ("A",)),
    ]
    found = carry_out(ledger, orders)
    kinds = (UnknownLegError, RuntimeError, UnknownSaleError, SettingError, SettingError, Outcome)
    assert [type(each) for each in found] == list(kinds)
    with ledger.engine.connect() as connection:
        assert connection.scalars(select(journal.c.key)).all() == ["6"]


def test_an_overwritten_count_leaves_an_audit_row(ledger: Ledger) -> None:
    counts = [SeatCount("A", 5, 4), SeatCount("B", 3, 0), SeatCount("D", 7, 2)]
    assert ledger.overwrite(counts, "stores", "01:00") == [counts[0], counts[2]]
    assert sold(ledger) == {"A": 4, "B": 0, "C": 4, "D": 2}
    with ledger.engine.connect() as connection:
        rows = connection.execute(select(overwritings).order_by(overwritings.c.leg)).all()
    assert [(row.leg, row.sold_before, row.sold, row.who, row.why) for row in rows] == [
        ("A", 1, 4, "stores", "01:00"),
        ("D", None, 2, "stores", "01:00"),
    ]


def test_known_legs_keep_their_counts(ledger: Ledger, database: str) -> None:
    carry_out(ledger, [sale("1", ("A",))])
    again = Ledger(database)
    assert again.add_legs([SeatCount("A", 50, 0), SeatCount("E", 8, 1)]) == 1
    assert sold(again) == {"A": 2, "B": 0, "C": 4, "E": 1}
    again.close()


def test_writes_are_durable(ledger: Ledger) -> None:
    with ledger.engine.connect() as connection:
        if ledger.engine.dialect.name == "sqlite":
            assert connection.scalar(text("PRAGMA journal_mode")) == "wal"
            assert connection.scalar(text("PRAGMA synchronous")) == 2
        else:
            assert connection.scalar(text("SHOW synchronous_commit")) == "on"
            assert connection.scalar(text("SHOW fsync")) == "on"


@pytest.mark.parametrize("url", ["nonsense", "mysterydb://x/y", "sqlite:////no/such/folder/at/all.sqlite"])
def test_a_database_that_cannot_be_used_is_said_in_one_line(url: str) -> None:
    with pytest.raises((SettingError, LedgerError)) as found:
        Ledger(url)
    assert "\n" not in str(found.value)


def test_many_writers_share_the_last_seats(database: str) -> None:
    """Several ledgers on one database, as several processes have: what was acknowledged is what was sold."""
    legs = [f"L{number}" for number in range(4)]
    ledgers = [Ledger(database) for _ in range(3)]
    ledgers[0].add_legs([SeatCount(leg, 40, 0) for leg in legs])
    writers = [LedgerWriter(each) for each in ledgers]
    acknowledged: dict[str, int] = dict.fromkeys(legs, 0)
    guard = threading.Lock()

    def client(number: int) -> None:
        draw = random.Random(number)
        mine: list[tuple[str, tuple[str, ...], int]] = []
        for step in range(40):
            writer = writers[draw.randrange(len(writers))]
            if mine and draw.random() < 0.3:
                key, path, seats = mine.pop()
                back = writer.submit(Cancellation(f"{number}-{step}", key)).result()
                assert back.answer["accepted"]
                moved = -seats
            else:
                path = tuple(draw.sample(legs, draw.randint(1, 3)))
                seats = draw.randint(1, 3)
                order = sale(f"{number}-{step}", path, seats)
                first = writer.submit(order).result()
                if draw.random() < 0.2:
                    assert writers[0].submit(order).result().repeated
                if not first.answer["accepted"]:
                    continue
                mine.append((order.key, path, seats))
                moved = seats
            with guard:
                for leg in path:
                    acknowledged[leg] += moved

    with ThreadPoolExecutor(12) as pool:
        for finished in [pool.submit(client, number) for number in range(12)]:
            finished.result()
    for writer in writers:
        writer.close()
    counts = ledgers[0].counts()
    assert {leg: counts[leg].sold for leg in legs} == acknowledged
    assert all(count.sold <= count.capacity for count in counts.values())
    assert any(count.remaining == 0 for count in counts.values()) or sum(acknowledged.values()) > 100
    for each in ledgers:
        each.close()


def test_counts_written_are_told_in_their_order(database: str) -> None:
    ledger = Ledger(database)
    ledger.add_legs([SeatCount("A", 500, 0)])
    told: dict[str, SeatCount] = {}
    writer = LedgerWriter(ledger, written=lambda counts: told.update({count.leg: count for count in counts}))
    waiting = [writer.submit(sale(f"a{number}", ("A",))) for number in range(50)]
    moved = writer.overwrite(Overwriting((SeatCount("A", 400, 7),), "stores", "01:00"))
    after = [writer.submit(sale(f"b{number}", ("A",))) for number in range(20)]
    assert all(answer.result().answer["accepted"] for answer in waiting + after)
    assert moved.result() == [SeatCount("A", 400, 7)]
    assert told == ledger.counts() == {"A": SeatCount("A", 400, 27)}
    writer.close()
    ledger.close()


def test_a_closed_writer_finishes_what_waits_and_takes_no_more(database: str) -> None:
    ledger = Ledger(database)
    ledger.add_legs([SeatCount("A", 500, 0)])
    writer = LedgerWriter(ledger)
    waiting = [writer.submit(sale(str(number), ("A",))) for number in range(300)]
    writer.close()
    assert all(answer.result(timeout=0).answer["accepted"] for answer in waiting)
    assert sold(ledger) == {"A": 300}
    with pytest.raises(LedgerError):
        writer.submit(sale("late", ("A",)))
    ledger.close()
